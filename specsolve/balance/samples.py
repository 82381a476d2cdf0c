"""Joint samples of the parameters, over all candidates that the tie-break rule left with odds.

Each candidate gets its share of the samples by its odds; around it they are independent draws from
`specsolve.balance.posterior.Posterior`, by rejection from a Student t proposal whose centre and covariance were fitted to
the density in a first round (the bound on the ratio is the largest met; Caffo, Booth & Davis 2002, Biometrika 89, 745).
A draw that lies nearer to another candidate belongs to that one and is not taken. The spread is that of star and list together,
with the curvature of the problem kept: not an ellipse.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .minima import FoundMinimum
from .posterior import Posterior
from .problem import Problem
from .solution import Candidate

PROPOSAL_FREEDOM = 5.0  # of the Student t: heavier tails than the density
FIRST_ROUND = 200  # draws to which the proposal is fitted
FIRST_SPREAD = 1.3  # of the first proposal, in units of the candidate's errors
SPREAD = 1.15  # of the fitted one
BATCH = 200
MAX_DRAWS_PER_SAMPLE = 60  # then the samples at hand are what there is
LEAST_ODDS = 1e-4


@dataclass(frozen=True, eq=False)
class Samples:
    """Samples of the joint posterior.

    Attributes
    ----------
    candidate : ndarray of int, shape (n,)
        Index of the candidate that each belongs to.
    parameters : ndarray, shape (n, 4)
        teff [K], logg, feh, vmic [km/s].
    log_density : ndarray, shape (n,)
        ln of the density about the own candidate, 0 at the candidate.
    efficiency : float
        Share of the draws that were taken; a low one means a density far from a Gaussian.
    """

    candidate: np.ndarray
    parameters: np.ndarray
    log_density: np.ndarray
    efficiency: float

    def __len__(self) -> int:
        return len(self.candidate)


def joint_samples(
    problem: Problem,
    candidates: tuple[Candidate, ...],
    found: tuple[FoundMinimum, ...],
    number: int,
    rng: np.random.Generator,
) -> Samples:
    """Samples over the candidates of a ranking.

    Parameters
    ----------
    problem : Problem
    candidates, found : tuple
        In the same order, as `specsolve.balance.tiebreak.rank` gives them.
    number : int
    rng : numpy Generator
        One for each star, so that the result does not depend on the order of the stars.

    Returns
    -------
    Samples
        Fewer than `number` where the density allows no more; none where no candidate has odds.
    """
    shares = np.array([c.odds if np.isfinite(c.odds) and c.odds > LEAST_ODDS else 0.0 for c in candidates])
    usable = [np.isfinite(_block(problem, c)).all() for c in candidates]
    shares = np.where(usable, shares, 0.0)
    empty = Samples(np.zeros(0, dtype=np.int64), np.zeros((0, 4)), np.zeros(0), float("nan"))
    if not shares.any() or problem.free.size == 0:
        return empty
    counts = rng.multinomial(number, shares / shares.sum())
    centres = {i: candidates[i] for i in np.flatnonzero(shares)}
    parts, draws = [], 0
    for i, count in enumerate(counts):
        if count:
            density = Posterior(problem, found[i])
            points, values, tried = _around(problem, density, i, centres, int(count), rng)
            parts.append((np.full(len(points), candidates[i].index), points, values))
            draws += tried
    label, points, values = (np.concatenate([part[k] for part in parts]) for k in range(3))
    return Samples(label, points, values, len(points) / draws if draws else float("nan"))


def _block(problem: Problem, candidate: Candidate) -> np.ndarray:
    return candidate.covariance[np.ix_(problem.free, problem.free)]


def _around(
    problem: Problem,
    density: Posterior,
    place: int,
    centres: dict[int, Candidate],
    count: int,
    rng: np.random.Generator,
) -> tuple[np.ndarray, np.ndarray, int]:
    """Samples around one candidate, their ln densities, and the draws that they took."""
    theta = density.item.minimum.theta
    inverse = {i: np.linalg.inv(_block(problem, c)) for i, c in centres.items()}

    def evaluate(free: np.ndarray) -> np.ndarray:
        values = np.full(len(free), -np.inf)
        for k, row in enumerate(free):
            full = theta.copy()
            full[problem.free] = row
            if _nearest(problem, full, centres, inverse) == place:
                values[k] = density.log_density(full)
        return values

    first = _Proposal(theta[problem.free], FIRST_SPREAD**2 * _block(problem, centres[place]))
    points = first.draw(FIRST_ROUND, rng)
    values = evaluate(points)
    second = first.fitted(points, values)
    kept: list[np.ndarray] = []
    ratios: list[np.ndarray] = []
    logs: list[np.ndarray] = []
    uniform: list[np.ndarray] = []
    tried = 0
    while tried < MAX_DRAWS_PER_SAMPLE * count + FIRST_ROUND:
        points = second.draw(BATCH, rng)
        values = evaluate(points)
        kept.append(points)
        logs.append(values)
        ratios.append(values - second.log_density(points))
        uniform.append(np.log(rng.random(BATCH)))
        tried += BATCH
        ratio = np.concatenate(ratios)
        taken = np.concatenate(uniform) < ratio - ratio.max() if np.isfinite(ratio.max()) else np.zeros(tried, bool)
        if taken.sum() >= count:
            break
    chosen = np.flatnonzero(taken)[:count]
    full = np.tile(theta, (chosen.size, 1))
    full[:, problem.free] = np.concatenate(kept)[chosen]
    return full, np.concatenate(logs)[chosen], tried


def _nearest(problem: Problem, theta: np.ndarray, centres: dict[int, Candidate], inverse: dict[int, np.ndarray]) -> int:
    if len(centres) == 1:
        return next(iter(centres))
    distance = {}
    for i, candidate in centres.items():
        away = (theta - candidate.parameters)[problem.free]
        distance[i] = float(away @ inverse[i] @ away)
    return min(distance, key=lambda i: distance[i])


class _Proposal:
    """Multivariate Student t."""

    def __init__(self, centre: np.ndarray, covariance: np.ndarray) -> None:
        self.centre, self.covariance = centre, covariance
        self._lower = np.linalg.cholesky(covariance)

    def draw(self, number: int, rng: np.random.Generator) -> np.ndarray:
        """Points, shape (number, n)."""
        normal = rng.normal(size=(number, self.centre.size))
        scale = np.sqrt(PROPOSAL_FREEDOM / rng.chisquare(PROPOSAL_FREEDOM, number))
        return self.centre + (normal * scale[:, None]) @ self._lower.T

    def log_density(self, points: np.ndarray) -> np.ndarray:
        """ln density up to a constant."""
        z = np.linalg.solve(self._lower, (points - self.centre).T)
        n = self.centre.size
        return -0.5 * (PROPOSAL_FREEDOM + n) * np.log1p((z**2).sum(axis=0) / PROPOSAL_FREEDOM)

    def fitted(self, points: np.ndarray, values: np.ndarray) -> _Proposal:
        """The proposal with mean and covariance of the density, from draws weighted by density over proposal."""
        ratio = values - self.log_density(points)
        if not np.isfinite(ratio.max()):
            return self
        weight = np.exp(ratio - ratio.max())
        weight /= weight.sum()
        if 1.0 / (weight @ weight) < 5.0 * self.centre.size:  # too few draws met the density
            return self
        mean = weight @ points
        away = points - mean
        return _Proposal(mean, SPREAD**2 * (away * weight[:, None]).T @ away)
