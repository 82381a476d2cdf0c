"""What is subtracted from each line abundance before the balance: solar iron, or a reference star's own lines."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from specsolve.constants import SOLAR_IRON

SOLAR_IRON_SOURCE = "Asplund, Amarsi & Grevesse 2021"


@dataclass(frozen=True, kw_only=True, eq=False)
class ZeroPoints:
    """Per-line zero points with their covariance.

    Attributes
    ----------
    keys : tuple of str
        Lines that have a zero point; None means every line (absolute analysis).
    values : ndarray, shape (n_keys,) or ()
        [dex]; A(Fe) of the line that counts as [Fe/H] = 0.
    covariance : ndarray, shape (n_keys, n_keys), or None for exact values
        [dex^2]; shared by all stars that use the same zero points, so it enters Cov_list.
    noise : ndarray, shape (n_keys,), or None for none
        [dex^2]; the part of the variances that is independent from line to line. It alone enters the weights: an error
        that all lines share says nothing of how well they agree.
    differential : bool
        log gf cancels against the same line of the reference star.
    source : str
        For the first line of a sheet.

    Examples
    --------
    >>> ZeroPoints.solar().for_lines(["Fe I 6301.500 3.654"])[0]
    array([7.46])
    """

    keys: tuple[str, ...] | None
    values: np.ndarray
    covariance: np.ndarray | None
    differential: bool
    source: str
    noise: np.ndarray | None = None

    @classmethod
    def solar(cls) -> ZeroPoints:
        """Solar iron for every line."""
        return cls(
            keys=None,
            values=np.asarray(SOLAR_IRON),
            covariance=None,
            differential=False,
            source=f"solar iron {SOLAR_IRON:.2f} ({SOLAR_IRON_SOURCE})",
        )

    @classmethod
    def reference(
        cls, abundances: Mapping[str, float], covariance: np.ndarray, source: str, noise: np.ndarray | None = None
    ) -> ZeroPoints:
        """Zero points from a reference star's line abundances (its [Fe/H] already subtracted).

        All of the variances count as independent if `noise` is not given.
        """
        noise = np.diag(covariance) if noise is None else noise
        return cls(
            keys=tuple(abundances),
            values=np.array(list(abundances.values()), float),
            covariance=np.asarray(covariance, float),
            differential=True,
            source=source,
            noise=np.asarray(noise, float),
        )

    def for_lines(self, keys) -> tuple[np.ndarray, np.ndarray | None]:
        """Zero points of these lines, shape (n,), nan where there is none; and their covariance (n, n), or None if
        exact.
        """
        if self.keys is None:
            return np.full(len(keys), float(self.values)), None
        index = self._index(keys)
        known = index >= 0
        values = np.where(known, self.values[np.where(known, index, 0)], np.nan)
        if self.covariance is None:
            return values, None
        covariance = self.covariance[np.ix_(index, index)]
        covariance[~known] = 0.0
        covariance[:, ~known] = 0.0
        return values, covariance

    def noise_for(self, keys) -> np.ndarray | None:
        """Independent variances of these lines, shape (n,), zero where there is no zero point; None if exact."""
        if self.keys is None or self.noise is None:
            return None
        index = self._index(keys)
        return np.where(index >= 0, self.noise[np.maximum(index, 0)], 0.0)

    def _index(self, keys) -> np.ndarray:
        place = {key: i for i, key in enumerate(self.keys)}
        return np.array([place.get(str(key), -1) for key in keys], dtype=np.int64)
