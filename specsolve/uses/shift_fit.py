"""Robust linear fits of the shifts along a sequence, and where linearity fails."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

HUBER_K = 1.345  # 95 % efficiency for normal errors; Huber 1964, Ann. Math. Statist. 35, 73
PASSES = 100
FEWEST = 8  # points, for up to four coefficients
FAILS_FROM = 3.0  # errors of a point beyond which it is off the fit
LEAST_OFF = {"teff": 5.0, "logg": 0.01}  # K, dex; smaller deviations do not matter
TERMS = ("constant", "teff", "logg", "feh")
SCALES = np.array([1000.0, 1.0, 1.0])  # coefficients count per 1000 K, per dex, per dex


@dataclass(frozen=True, eq=False)
class ShiftFit:
    """A shift as a linear function of the true parameters.

    Attributes
    ----------
    name : str
    terms : tuple of str
        Those that vary among the points.
    coefficients, errors : ndarray, shape (n_terms,)
        At the mean of the points; per 1000 K, per dex, per dex.
    centre : ndarray, shape (3,)
        Mean teff, logg, feh.
    values : ndarray, shape (n_points,)
        The fit at every point; nan where there is no shift.
    rms : float
        Robust residual.
    fails : ndarray of bool, shape (n_points,)
    """

    name: str
    terms: tuple[str, ...]
    coefficients: np.ndarray
    errors: np.ndarray
    centre: np.ndarray
    values: np.ndarray
    rms: float
    fails: np.ndarray

    @property
    def words(self) -> str:
        """The fit as a formula.

        Returns
        -------
        str
            For example "shift of logg = 0.020 - 0.013 (teff - 5500) / 1000 ...".
        """
        text = f"shift of {self.name} = {self.coefficients[0]:.4g} +- {self.errors[0]:.2g}"
        for term, value, error in zip(self.terms[1:], self.coefficients[1:], self.errors[1:], strict=True):
            place = TERMS.index(term) - 1
            over = " / 1000" if term == "teff" else ""
            text += f"; {value:+.4g} +- {error:.2g} ({term} - {self.centre[place]:.4g}){over}"
        return text + f"; residual {self.rms:.3g}; fails at {int(self.fails.sum())} points"


def fit_shift(name: str, theta: np.ndarray, shift: np.ndarray, error: np.ndarray) -> ShiftFit | None:
    """Huber fit of a shift; None with fewer than eight points.

    Parameters
    ----------
    name : str
        "teff" or "logg".
    theta : ndarray, shape (n_points, 4)
    shift, error : ndarray, shape (n_points,)
    """
    known = np.isfinite(shift) & np.isfinite(error) & (error > 0.0) & np.isfinite(theta[:, :3]).all(axis=1)
    if known.sum() < FEWEST:
        return None
    x = theta[:, :3] / SCALES
    centre = x[known].mean(axis=0)
    varies = np.ptp(x[known], axis=0) > 1e-6
    design = np.column_stack([np.ones(len(x)), (x - centre)[:, varies]])
    a, y, s = design[known], shift[known], error[known]
    w = np.ones(y.size)
    for _ in range(PASSES):
        weight = w / s**2
        coefficients, *_ = np.linalg.lstsq(a * np.sqrt(weight)[:, None], y * np.sqrt(weight), rcond=None)
        residual = y - a @ coefficients
        scale = max(1.0, 1.4826 * float(np.median(np.abs(residual / s))))
        new = np.minimum(1.0, HUBER_K * scale / np.maximum(np.abs(residual / s), 1e-12))
        if np.max(np.abs(new - w)) < 1e-8:
            break
        w = new
    covariance = np.linalg.pinv((a * (w / s**2)[:, None]).T @ a) * scale**2
    values = np.where(known, design @ coefficients, np.nan)
    off = np.abs(shift - values)
    fails = known & (off > FAILS_FROM * error) & (off > LEAST_OFF[name])
    terms = ("constant", *(term for term, free in zip(TERMS[1:], varies, strict=True) if free))
    rms = 1.4826 * float(np.median(np.abs(residual)))
    return ShiftFit(name, terms, coefficients, np.sqrt(np.diag(covariance)), centre * SCALES, values, rms, fails)
