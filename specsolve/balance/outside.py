"""What is known about a star from elsewhere, as Gaussian terms on its parameters."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from .solution import PARAMETER_NAMES

MeanFunction = Callable[[np.ndarray], tuple[float, np.ndarray]]


@dataclass(frozen=True, kw_only=True, eq=False)
class Outside:
    """Outside knowledge: means and covariance of some of the parameters.

    Attributes
    ----------
    names : tuple of str
        Of "teff", "logg", "feh", "vmic".
    mean : tuple
        Each entry a float, or a function of theta = (teff, logg, feh, vmic) that returns the expected value of the
        parameter there and its gradient, shape (4,); so a gravity from a parallax can follow the temperature. It may
        have a method `check(theta)` that raises InputError where a solution lies outside its range.
    covariance : ndarray, shape (n, n)
        Zero variance = fixed: the parameter's own residual is then removed from the solve. A fixed entry must be a
        number.
    source : str
        Where it comes from.

    Examples
    --------
    >>> fixed = Outside.fixed("from asteroseismology", logg=2.45)
    >>> known = Outside.gaussian("photometry", teff=(4810.0, 60.0))
    >>> dict(fixed.fixed_values), [t.sigma for t in known.terms]
    ({'logg': 2.45}, [60.0])
    """

    names: tuple[str, ...]
    mean: tuple[float | MeanFunction, ...]
    covariance: np.ndarray
    source: str

    def __post_init__(self) -> None:
        unknown = set(self.names) - set(PARAMETER_NAMES)
        if unknown or len(set(self.names)) != len(self.names):
            raise ValueError(f"outside names {self.names} must be different ones of {PARAMETER_NAMES}")
        covariance = np.asarray(self.covariance, float)
        if covariance.shape != (len(self.names),) * 2 or len(self.mean) != len(self.names):
            raise ValueError("outside mean and covariance must match the names")
        if not np.allclose(covariance, covariance.T) or not (np.diag(covariance) >= 0.0).all():
            raise ValueError("outside covariance must be symmetric with non-negative variances")
        some = np.diag(covariance) > 0.0
        if np.any(covariance[~some] != 0.0):
            raise ValueError("a fixed entry (zero variance) cannot be correlated with another")
        if np.linalg.eigvalsh(covariance[np.ix_(some, some)]).min(initial=1.0) <= 0.0:
            raise ValueError("outside covariance must be positive definite among the entries with variance")
        for name, mean, variance in zip(self.names, self.mean, np.diag(covariance), strict=True):
            if callable(mean) and variance == 0.0:
                raise ValueError(f"{name}: a fixed value must be a number, not a function of the parameters")
            if not callable(mean) and not np.isfinite(mean):
                raise ValueError(f"{name} = {mean} is not a finite number")
        object.__setattr__(self, "covariance", covariance)

    @classmethod
    def fixed(cls, source: str, **values: float) -> Outside:
        """Parameters held at given values."""
        names = tuple(values)
        return cls(
            names=names,
            mean=tuple(float(v) for v in values.values()),
            covariance=np.zeros((len(names),) * 2),
            source=source,
        )

    @classmethod
    def gaussian(cls, source: str, **values: tuple[float, float]) -> Outside:
        """Independent Gaussian terms given as name=(mean, sigma)."""
        sigmas = np.array([float(sigma) for _, sigma in values.values()])
        return cls(
            names=tuple(values),
            mean=tuple(float(mean) for mean, _ in values.values()),
            covariance=np.diag(sigmas**2),
            source=source,
        )

    @property
    def fixed_values(self) -> dict[str, float]:
        """Name to value of the entries of zero variance."""
        return {
            name: float(mean)
            for name, mean, variance in zip(self.names, self.mean, np.diag(self.covariance), strict=True)
            if variance == 0.0
        }

    @property
    def terms(self) -> tuple[OutsideTerm, ...]:
        """Uncorrelated views of the entries with variance, for reports."""
        return tuple(
            OutsideTerm(name=name, mean=mean, sigma=float(np.sqrt(variance)), source=self.source)
            for name, mean, variance in zip(self.names, self.mean, np.diag(self.covariance), strict=True)
            if variance > 0.0
        )

    def whitened(self, theta: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Whitened differences L^-1 (theta - mean), shape (n,), and their Jacobian, shape (n, 4); sum of squares is
        the term.
        """
        free, inverse = self._whitening
        if not free:
            return np.zeros(0), np.zeros((0, len(PARAMETER_NAMES)))
        difference, jacobian = np.zeros(len(free)), np.zeros((len(free), len(PARAMETER_NAMES)))
        for row, i in enumerate(free):
            place = PARAMETER_NAMES.index(self.names[i])
            mean = self.mean[i]
            value, gradient = mean(theta) if callable(mean) else (mean, 0.0)
            difference[row] = theta[place] - value
            jacobian[row] = -np.asarray(gradient)
            jacobian[row, place] += 1.0
        return inverse @ difference, inverse @ jacobian

    @cached_property
    def _whitening(self) -> tuple[list[int], np.ndarray]:
        """Entries with variance, and L^-1 of their covariance L L^T."""
        free = [i for i, variance in enumerate(np.diag(self.covariance)) if variance > 0.0]
        return free, np.linalg.inv(np.linalg.cholesky(self.covariance[np.ix_(free, free)])) if free else np.zeros(
            (0, 0)
        )

    def check(self, theta: np.ndarray) -> None:
        """Raise InputError if a solution lies outside the range of a relation."""
        for mean in self.mean:
            if hasattr(mean, "check"):
                mean.check(theta)


@dataclass(frozen=True, kw_only=True)
class OutsideTerm:
    """One entry of an `Outside` with variance."""

    name: str
    mean: float | MeanFunction
    sigma: float
    source: str


def fixed_parameters(outside: tuple[Outside, ...]) -> dict[str, float]:
    """All fixed values; raises ValueError if two sources fix one parameter at different values."""
    values: dict[str, float] = {}
    for item in outside:
        for name, value in item.fixed_values.items():
            if values.setdefault(name, value) != value:
                raise ValueError(f"{name} is fixed twice, at {values[name]:g} and {value:g}")
    return values


def whitened_terms(outside: tuple[Outside, ...], theta: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Stacked `Outside.whitened` of all sources."""
    parts = [item.whitened(theta) for item in outside]
    if not parts:
        return np.zeros(0), np.zeros((0, len(PARAMETER_NAMES)))
    return np.concatenate([p[0] for p in parts]), np.concatenate([p[1] for p in parts])
