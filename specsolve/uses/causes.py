"""Which causes explain why two sets of parameters differ: a few named ones, weighed against each other.

For star i the difference D_i (theirs minus ours) is taken to be normal about

    sum_known k_i + sum_scale a v_i + sum_held m u_i,

with covariance ``f S_i + sum_held t^2 u_i u_i^T`` and, between stars, what the line list shares. A *known* cause has a
stated size (their solar iron, the other treatment): k_i is one counterfactual solve. A *scale* cause has one unknown
amplitude a for the whole set (a shift of the Fe II log gf). A *held* parameter was taken from elsewhere: u_i is the
response of all four parameters to a unit change of it, and its errors have an unknown mean m and scatter t. The factor
f >= 1 lets stated errors be too small. Amplitudes are maximised over; each costs ln(number of data), and a cause must
improve minus two ln L by a further 6 (odds of 20 : 1), the same limit as in the choice among minima.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from itertools import combinations

import numpy as np

KNOWN, SCALE, HELD = "known", "scale", "held"
EVIDENCE = 6.0  # minus two ln of odds 20 : 1
LARGEST_LN_FACTOR = 6.0  # ln f: errors too small by up to a factor 20
LARGEST_SCATTER = 20.0  # of a held parameter, in median errors of the difference
MOST_CAUSES = 3
LEADING = 2  # single causes whose pairs with every other are tried
FEWEST_FOR_SCATTER = 3  # stars; with fewer a held parameter has a mean offset alone


@dataclass(frozen=True, eq=False)
class Differences:
    """Differences of a set of stars and how each cause would make them.

    Attributes
    ----------
    values : ndarray, shape (n_stars, 4)
        Theirs minus ours; nan where they give none.
    covariances : ndarray, shape (n_stars, 4, 4)
        Of the stars' own errors on both sides.
    modes : ndarray, shape (n_stars, 4, n_modes)
        Errors shared between stars (`shared_errors.list_modes`).
    vectors : mapping of str to ndarray, shape (n_stars, 4)
        Effect of each cause: whole (known) or per unit (scale, held). nan for a star for which it cannot be computed.
    kinds : mapping of str to str
        "known", "scale" or "held".
    stated : tuple of str
        Known causes that the published table states: taken as given.
    """

    values: np.ndarray
    covariances: np.ndarray
    modes: np.ndarray
    vectors: Mapping[str, np.ndarray]
    kinds: Mapping[str, str]
    stated: tuple[str, ...] = ()

    @property
    def n_values(self) -> int:
        """Number of differences."""
        return int(np.isfinite(self.values).sum())


@dataclass(frozen=True, eq=False)
class Fit:
    """A set of causes fitted to the differences.

    Attributes
    ----------
    causes : tuple of str
    criterion : float
        -2 ln L plus the costs of all causes.
    minus_two_ln : float
    amplitudes, errors : dict
        Of scale causes [dex] and means of held ones [their unit].
    scatters : dict
        Of held causes.
    factor : float
        f.
    """

    causes: tuple[str, ...]
    criterion: float
    minus_two_ln: float
    amplitudes: dict[str, float] = field(default_factory=dict)
    errors: dict[str, float] = field(default_factory=dict)
    scatters: dict[str, float] = field(default_factory=dict)
    factor: float = 1.0


@dataclass(frozen=True, eq=False)
class Verdict:
    """What is named.

    Attributes
    ----------
    best : Fit
    without : dict of str to float
        By how much the criterion rises when a named cause is taken away.
    rivals : tuple of Fit
        Other explanations with a criterion within 6 of the best.
    tested : dict of str to float
        For every cause alone: criterion without it minus criterion with it.
    """

    best: Fit
    without: dict[str, float]
    rivals: tuple[Fit, ...]
    tested: dict[str, float]


def cost(differences: Differences, cause: str) -> float:
    """What a cause must earn in -2 ln L."""
    kind = differences.kinds[cause]
    if cause in differences.stated:
        return 0.0
    free = 0 if kind == KNOWN else 1 if kind == SCALE or len(differences.values) < FEWEST_FOR_SCATTER else 2
    return EVIDENCE + free * np.log(max(differences.n_values, 2))


def fit_causes(differences: Differences, causes: Sequence[str]) -> Fit:
    """Fit one set of causes."""
    from scipy.optimize import minimize

    y = differences.values.copy()
    known = np.isfinite(y)
    n_stars = len(y)
    for cause in causes:
        if differences.kinds[cause] == KNOWN:
            y = y - np.nan_to_num(differences.vectors[cause])
    y = np.where(known, y, 0.0)
    both = known[:, :, None] & known[:, None, :]
    diagonal = np.einsum("ijj->ij", differences.covariances)
    unit = np.sqrt([np.median(diagonal[of, k]) if (of := known[:, k]).any() else 1.0 for k in range(4)])
    unit = np.where(np.isfinite(unit) & (unit > 0.0), unit, 1.0)
    y = y / unit
    own = np.where(both, differences.covariances / np.outer(unit, unit), np.eye(4) * ~known[:, :, None])
    modes = np.where(known[:, :, None], differences.modes / unit[:, None], 0.0)
    free = [cause for cause in causes if differences.kinds[cause] != KNOWN]
    held = [c for c in free if differences.kinds[c] == HELD and n_stars >= FEWEST_FOR_SCATTER]
    scale_of = {c: unit[_place(c)] if differences.kinds[c] == HELD else 1.0 for c in free}
    design = np.zeros((n_stars, 4, len(free)))
    for k, cause in enumerate(free):
        design[:, :, k] = np.where(known, np.nan_to_num(differences.vectors[cause]) / unit * scale_of[cause], 0.0)
    held_places = [free.index(cause) for cause in held]

    def evaluate(parameters: np.ndarray):
        covariance = np.exp(parameters[0]) * own
        covariance = np.where(both, covariance, own)
        for k, scatter in zip(held_places, parameters[1:], strict=True):
            u = design[:, :, k]
            covariance = covariance + scatter**2 * u[:, :, None] * u[:, None, :]
        return _generalised_least_squares(y, covariance, modes, design)

    start = np.r_[0.1, np.full(len(held), 2.0)]
    bounds = [(0.0, LARGEST_LN_FACTOR), *[(0.0, LARGEST_SCATTER)] * len(held)]
    found = minimize(lambda p: evaluate(p)[0], start, method="L-BFGS-B", bounds=bounds)
    minus_two_ln, amplitude, covariance = evaluate(found.x)
    amplitudes = {c: float(amplitude[k] * scale_of[c]) for k, c in enumerate(free)}
    errors = {c: float(np.sqrt(covariance[k, k]) * scale_of[c]) for k, c in enumerate(free)}
    scatters = {c: float(s * scale_of[c]) for c, s in zip(held, found.x[1:], strict=True)}
    total = minus_two_ln + sum(cost(differences, cause) for cause in causes)
    return Fit(
        tuple(causes), float(total), float(minus_two_ln), amplitudes, errors, scatters, float(np.exp(found.x[0]))
    )


def name_causes(differences: Differences, most: int = MOST_CAUSES) -> Verdict:
    """The causes that explain a set best.

    Every single cause is tried, and every pair with one of the two best of them; then further ones are added as long as
    that pays.
    """
    causes = [c for c in differences.vectors if np.isfinite(differences.vectors[c]).all(axis=1).any()]
    stated = tuple(c for c in causes if c in differences.stated)
    others = [c for c in causes if c not in stated and not _zero(differences.vectors[c])]
    fits = {}

    def fit(extra: tuple[str, ...]) -> Fit:
        key = tuple(sorted(extra))
        if key not in fits:
            fits[key] = fit_causes(differences, stated + key)
        return fits[key]

    fit(())
    leading = sorted(others, key=lambda c: fit((c,)).criterion)[:LEADING] if most > 0 else []
    for extra in combinations(others, 2) if most > 1 else ():
        if set(extra) & set(leading):
            fit(extra)
    best = min(fits, key=lambda key: fits[key].criterion)
    while len(best) < min(most, len(others)) and len(best) >= 2:
        further = [tuple(sorted((*best, c))) for c in others if c not in best]
        candidate = min(further, key=lambda key: fit(key).criterion)
        if fits[candidate].criterion >= fits[best].criterion:
            break
        best = candidate
    without = {c: fit(tuple(k for k in best if k != c)).criterion - fits[best].criterion for c in best}
    rivals = [
        one
        for key, one in fits.items()
        if key != best and not set(best) < set(key) and one.criterion < fits[best].criterion + EVIDENCE
    ]
    tested = {c: fit(()).criterion - fit((c,)).criterion for c in others}
    return Verdict(fits[best], without, tuple(sorted(rivals, key=lambda one: one.criterion)), tested)


def _generalised_least_squares(y, covariance, modes, design) -> tuple[float, np.ndarray, np.ndarray]:
    """-2 ln L maximised over the amplitudes, the amplitudes and their covariance."""
    inverse = np.linalg.inv(covariance)
    _, ln_determinants = np.linalg.slogdet(covariance)
    right = np.concatenate([y[:, :, None], design], axis=2)
    weighted = inverse @ right
    gram = np.einsum("ijk,ijl->kl", right, weighted)
    cross = np.einsum("ijm,ijk->mk", modes, weighted)
    inner = np.eye(modes.shape[2]) + np.einsum("ijm,ijn->mn", modes, inverse @ modes)
    gram = gram - cross.T @ np.linalg.solve(inner, cross)
    ln_determinant = float(ln_determinants.sum() + np.linalg.slogdet(inner)[1])
    if design.shape[2] == 0:
        return float(gram[0, 0]) + ln_determinant, np.zeros(0), np.zeros((0, 0))
    precision, projection = gram[1:, 1:], gram[1:, 0]
    covariance = np.linalg.pinv(precision, hermitian=True)
    amplitude = covariance @ projection
    return float(gram[0, 0] - projection @ amplitude) + ln_determinant, amplitude, covariance


def _place(cause: str) -> int:
    from specsolve.balance.solution import PARAMETER_NAMES

    return PARAMETER_NAMES.index(cause.removeprefix("held_"))


def _zero(vectors: np.ndarray) -> bool:
    return not np.any(np.nan_to_num(vectors))
