"""Common [Fe/H] of a cluster, its intrinsic scatter, and the probability of each star to be a member.

A star is a member with probability 1 - e: its [Fe/H] is then normal about the common value m with variance
s_i^2 + t^2 (its own error, Cov_star alone, and the intrinsic scatter); else it is one of the field, normal about the
median of all stars with a wide standard deviation. A tied star counts with all its candidates by their odds. The
posterior of (m, t, e), flat in all three, is summed on a grid: there is nothing to tune and nothing random.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

FIELD_SCATTER = (
    0.5  # dex; far wider than a cluster, narrower than the disc and the halo together (common practice, no source)
)
LARGEST_SCATTER = 0.3  # dex; more is no cluster of one metallicity
LARGEST_FIELD_SHARE = 0.5
N_FEH, N_SCATTER, N_SHARE = 81, 41, 16
COARSE_REACH = 1.0  # dex about the median
REACH = 6.0  # standard deviations of the fine grid
TAIL = 1e-5  # of the highest marginal density, where the fine grid of the scatter ends
LOG_2PI = float(np.log(2.0 * np.pi))


@dataclass(frozen=True, eq=False)
class Metallicities:
    """[Fe/H] of the stars of a cluster.

    Attributes
    ----------
    values, errors, odds : tuple of ndarray, each of shape (n_candidates_i,)
        Of each star: its candidates, their own errors, their odds (adding up to one).
    """

    values: tuple[np.ndarray, ...]
    errors: tuple[np.ndarray, ...]
    odds: tuple[np.ndarray, ...]

    @property
    def reported(self) -> np.ndarray:
        """Of the most likely candidates, shape (n_stars,)."""
        return np.array([v[int(np.argmax(o))] for v, o in zip(self.values, self.odds, strict=True)])

    @property
    def field(self) -> float:
        """Centre of the field."""
        return float(np.median(self.reported))


@dataclass(frozen=True, eq=False)
class CommonMetallicity:
    """Posterior of the mixture.

    Attributes
    ----------
    feh, feh_error : float
        Mean and standard deviation of m.
    scatter, scatter_limit : float
        Median of t, and its 95 % upper limit.
    field_share : float
        Mean of e.
    membership : ndarray, shape (n_stars,)
    others, others_error : ndarray, shape (n_stars,)
        What the other stars say of the [Fe/H] of a member: mean, and standard deviation with the intrinsic scatter.
    """

    feh: float
    feh_error: float
    scatter: float
    scatter_limit: float
    field_share: float
    membership: np.ndarray
    others: np.ndarray
    others_error: np.ndarray


def star_log_likelihood(
    values: np.ndarray, errors: np.ndarray, odds: np.ndarray, field: float, feh, scatter, share
) -> tuple[np.ndarray, np.ndarray]:
    """ln of the densities of one star as a member and as one of the field, each with its share.

    Parameters
    ----------
    values, errors, odds : ndarray, shape (n_candidates,)
    field : float
    feh, scatter, share : float or ndarray
        m, t, e; they broadcast.
    """
    member = field_part = -np.inf
    for value, error, odd in zip(values, errors, odds, strict=True):
        if odd <= 0.0:
            continue
        member = np.logaddexp(member, np.log(odd) + _log_normal(value - feh, error**2 + scatter**2))
        wide = _log_normal(value - field, error**2 + FIELD_SCATTER**2)
        field_part = np.logaddexp(field_part, np.log(odd) + wide)
    with np.errstate(divide="ignore"):
        return np.log(1.0 - share) + member, np.log(share) + field_part


def log_likelihood(data: Metallicities, feh: float, scatter: float, share: float) -> float:
    """ln L of (m, t, e); the posterior is the same within the allowed ranges.

    Examples
    --------
    >>> one = Metallicities((np.array([0.0]),), (np.array([0.1]),), (np.array([1.0]),))
    >>> round(log_likelihood(one, 0.0, 0.0, 0.0), 3)
    1.384
    """
    total = 0.0
    for value, error, odd in zip(data.values, data.errors, data.odds, strict=True):
        total += float(np.logaddexp(*star_log_likelihood(value, error, odd, data.field, feh, scatter, share)))
    return total


def common_metallicity(data: Metallicities) -> CommonMetallicity:
    """Sum the posterior on a grid: once coarsely to find it, once finely.

    Parameters
    ----------
    data : Metallicities
        Of two stars or more.
    """
    share = (np.arange(N_SHARE) + 0.5) / N_SHARE * LARGEST_FIELD_SHARE
    feh = data.field + np.linspace(-COARSE_REACH, COARSE_REACH, 2 * N_FEH)
    scatter = np.linspace(0.0, LARGEST_SCATTER, N_SCATTER)
    for fine in (False, True):
        mesh = np.meshgrid(feh, scatter, share, indexing="ij", sparse=True)
        parts = [
            star_log_likelihood(v, e, o, data.field, *mesh)
            for v, e, o in zip(data.values, data.errors, data.odds, strict=True)
        ]
        of_star = [np.logaddexp(*part) for part in parts]
        total = np.sum(of_star, axis=0)
        weight = _normalised(total)
        mean, deviation = _moments(feh, weight.sum(axis=(1, 2)))
        if not fine:
            step = feh[1] - feh[0]
            reach = REACH * max(deviation, 0.3 * step)
            feh = mean + np.linspace(-reach, reach, N_FEH)
            marginal = weight.sum(axis=(0, 2))
            end = scatter[np.flatnonzero(marginal > TAIL * marginal.max())[-1]]
            scatter = np.linspace(0.0, min(max(end, 0.02), LARGEST_SCATTER), N_SCATTER)
    membership = np.array([float(np.sum(weight * np.exp(p[0] - s))) for p, s in zip(parts, of_star, strict=True)])
    others, others_error = np.zeros(len(parts)), np.zeros(len(parts))
    for i, own in enumerate(of_star):
        left = _normalised(total - own)
        centre, spread = _moments(feh, left.sum(axis=(1, 2)))
        intrinsic = float(np.sum(left.sum(axis=(0, 2)) * scatter**2))
        others[i], others_error[i] = centre, np.hypot(spread, np.sqrt(intrinsic))
    cumulative = np.cumsum(weight.sum(axis=(0, 2)))
    return CommonMetallicity(
        mean,
        deviation,
        float(np.interp(0.5, cumulative, scatter)),
        float(np.interp(0.95, cumulative, scatter)),
        float(np.sum(weight.sum(axis=(0, 1)) * share)),
        membership,
        others,
        others_error,
    )


def candidate_odds(
    values: np.ndarray, errors: np.ndarray, odds: np.ndarray, common: CommonMetallicity, star: int, field: float
) -> np.ndarray:
    """Odds of the candidates of one star with what the other stars say of its [Fe/H]."""
    log_odds = np.full(len(values), -np.inf)
    for c, (value, error, odd) in enumerate(zip(values, errors, odds, strict=True)):
        if odd > 0.0:
            member, wide = star_log_likelihood(
                np.array([value]),
                np.array([error]),
                np.array([odd]),
                field,
                common.others[star],
                common.others_error[star],
                common.field_share,
            )
            log_odds[c] = np.logaddexp(member, wide)
    shares = np.exp(log_odds - log_odds.max())
    return shares / shares.sum()


def _log_normal(deviation, variance):
    return -0.5 * (deviation**2 / variance + np.log(variance) + LOG_2PI)


def _normalised(log_weight: np.ndarray) -> np.ndarray:
    weight = np.exp(log_weight - log_weight.max())
    return weight / weight.sum()


def _moments(values: np.ndarray, weight: np.ndarray) -> tuple[float, float]:
    mean = float(weight @ values)
    return mean, float(np.sqrt(max(weight @ (values - mean) ** 2, 0.0)))


def metallicities(values: Sequence, errors: Sequence, odds: Sequence) -> Metallicities:
    """`Metallicities` from sequences a star."""
    as_arrays = [tuple(np.asarray(one, float) for one in part) for part in (values, errors, odds)]
    return Metallicities(*as_arrays)
