"""One star against its published values: what single causes would do to it, and shares averaged over their order."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import permutations

import numpy as np

from specsolve.balance.problem import Problem
from specsolve.balance.solution import PARAMETER_NAMES
from specsolve.errors import OutOfGridError

from .causes import HELD, KNOWN, SCALE
from .local import Point, solve_near, with_fixed, with_log_gf_shift

HELD_NAMES = {"held_teff": "teff", "held_logg": "logg", "held_vmic": "vmic"}
SCALE_STEP = 0.1  # dex, for effects per unit of a scale
LEAST_STEP = 0.5  # errors of our value; a held parameter that differs by less is moved by so much, for its response
SAME_SOLAR_IRON = 0.005  # dex; solar iron published to two decimals
SOURCE = "their value"


@dataclass(frozen=True, eq=False)
class Case:
    """One star with its solution and what is published of it.

    Attributes
    ----------
    name, published_name : str
    problem : Problem
    point : Point
        Our solution.
    theirs, errors : ndarray, shape (4,)
        nan where not given.
    solar_iron : float
        nan where they do not say.
    treatment : str
        Empty where they do not say.
    """

    name: str
    published_name: str
    problem: Problem
    point: Point
    theirs: np.ndarray
    errors: np.ndarray
    solar_iron: float = float("nan")
    treatment: str = ""

    @property
    def difference(self) -> np.ndarray:
        """Theirs minus ours, shape (4,)."""
        return self.theirs - self.point.theta

    @property
    def covariance_star(self) -> np.ndarray:
        """Of the difference, without shared errors; errors that they do not give count as zero."""
        return self.point.cov_star + np.diag(np.nan_to_num(self.errors) ** 2)

    @property
    def own_zero(self) -> float:
        """Solar iron of our [Fe/H]; nan in differential work."""
        zero = self.problem.zero_points
        return float("nan") if zero.differential else float(zero.values)

    @property
    def states_solar_iron(self) -> bool:
        """They state a solar iron that is not ours."""
        return bool(abs(self.solar_iron - self.own_zero) > SAME_SOLAR_IRON)

    @property
    def states_treatment(self) -> bool:
        """They state a line formation that is not ours."""
        return self.treatment not in ("", self.problem.treatment)

    @property
    def theirs_on_our_zero(self) -> np.ndarray:
        """Their parameters with [Fe/H] counted from our solar iron, where they state theirs."""
        theta = self.theirs.copy()
        if self.states_solar_iron:
            theta[2] += self.solar_iron - self.own_zero
        return theta


def applicable(case: Case) -> dict[str, str]:
    """Causes that can be computed for a star, with their kind."""
    problem = case.problem
    found = {
        cause: HELD
        for cause, name in HELD_NAMES.items()
        if name not in problem.fixed and np.isfinite(case.theirs[PARAMETER_NAMES.index(name)])
    }
    if not problem.zero_points.differential:
        found["zero_point"] = SCALE
        if "feh" in problem.fixed:
            del found["zero_point"]
        if case.states_solar_iron:
            found["solar_iron"] = KNOWN
        if "logg" not in problem.fixed:
            found["fe2_scale"] = SCALE
    if other_treatment(problem) and case.treatment != problem.treatment:
        found["treatment"] = KNOWN
    return found


def other_treatment(problem: Problem) -> str:
    """The other line formation of the grid; empty if there is none."""
    return next((name for name in problem.grid.treatments if name != problem.treatment), "")


def changed(case: Case, causes: Mapping[str, float]) -> Problem:
    """The problem with causes at work.

    Parameters
    ----------
    case : Case
    causes : mapping of str to float
        Value of what is held, the solar iron, the shift of a scale [dex]; any number for the line formation.
    """
    problem = case.problem
    zero = 0.0
    for cause, amount in causes.items():
        if cause in HELD_NAMES:
            problem = with_fixed(problem, SOURCE, **{HELD_NAMES[cause]: amount})
        elif cause == "treatment":
            problem = problem.replace(treatment=other_treatment(problem))
        elif cause == "fe2_scale":
            problem = with_log_gf_shift(problem, {problem.pair[1]: amount})
        elif cause == "zero_point":
            zero += amount
        elif cause == "solar_iron":
            zero += amount - case.own_zero
    if zero:
        points = problem.zero_points
        problem = problem.replace(zero_points=dataclasses.replace(points, values=points.values + zero))
    return problem


def solved_with(case: Case, causes: Mapping[str, float]) -> Point:
    """Our lines solved with causes at work, from our solution."""
    return solve_near(changed(case, causes), case.point.theta) if causes else case.point


def vector(case: Case, cause: str) -> np.ndarray:
    """Effect of a cause on the four parameters, shape (4,): whole, or per unit; nan where it cannot be computed."""
    theta = case.point.theta
    if cause in HELD_NAMES:
        place = PARAMETER_NAMES.index(HELD_NAMES[cause])
        step, error = case.difference[place], float(np.sqrt(case.point.cov_star[place, place]))
        if not abs(step) >= LEAST_STEP * error:
            step = error
        for attempt in (step, -error):  # the far side may lie outside the grid
            change = solved_with(case, {cause: theta[place] + attempt}).theta - theta
            if np.isfinite(change).all():
                return change / attempt
        return change
    if cause in ("zero_point", "fe2_scale"):
        return (solved_with(case, {cause: SCALE_STEP}).theta - theta) / SCALE_STEP
    if cause == "solar_iron":
        return solved_with(case, {cause: case.solar_iron}).theta - theta if case.states_solar_iron else np.zeros(4)
    return solved_with(case, {cause: 1.0}).theta - theta


def amount_of(case: Case, cause: str, amplitudes: Mapping[str, float]) -> float:
    """With what a cause works on this star: their value, their solar iron, or the fitted shift of a scale."""
    if cause in HELD_NAMES:
        return float(case.theirs[PARAMETER_NAMES.index(HELD_NAMES[cause])])
    if cause == "solar_iron":
        return case.solar_iron
    return float(amplitudes.get(cause, np.nan))


@dataclass(frozen=True, eq=False)
class Shares:
    """How named causes split the difference of one star.

    Attributes
    ----------
    share : dict of str to ndarray, shape (4,)
        Averaged over all orders in which the causes can be put to work (the Shapley value of a cooperative game:
        Shapley 1953, Contributions to the Theory of Games II, 307).
    spread : dict of str to ndarray, shape (4,)
        Largest minus smallest over the orders.
    remainder : ndarray, shape (4,)
    point : Point
        All of them together.
    """

    share: dict[str, np.ndarray]
    spread: dict[str, np.ndarray]
    remainder: np.ndarray
    point: Point


def split(case: Case, causes: Sequence[str], amplitudes: Mapping[str, float]) -> Shares:
    """Counterfactual solves with every subset of the causes; effects do not add, so each is averaged over the orders."""
    amounts = {cause: amount_of(case, cause, amplitudes) for cause in causes if acts_on(case, cause)}
    points: dict[frozenset, Point] = {frozenset(): case.point}

    def theta(subset: frozenset) -> np.ndarray:
        if subset not in points:
            points[subset] = solved_with(case, {c: amounts[c] for c in causes if c in subset})
        return points[subset].theta

    steps: dict[str, list[np.ndarray]] = {cause: [] for cause in causes}
    for order in permutations(amounts):
        done: frozenset = frozenset()
        for cause in order:
            further = done | {cause}
            steps[cause].append(theta(further) - theta(done))
            done = further
    for cause in causes:
        steps[cause] = steps[cause] or [np.zeros(4)]
    everything = frozenset(amounts)
    total = theta(everything)
    return Shares(
        {cause: np.mean(found, axis=0) for cause, found in steps.items()},
        {cause: np.ptp(found, axis=0) for cause, found in steps.items()},
        case.theirs - total,
        points[everything],
    )


def acts_on(case: Case, cause: str) -> bool:
    """Whether a cause named for the set applies to this star."""
    if cause in HELD_NAMES:
        return bool(np.isfinite(case.theirs[PARAMETER_NAMES.index(HELD_NAMES[cause])]))
    if cause == "solar_iron":
        return case.states_solar_iron
    if cause == "treatment":
        return case.treatment != case.problem.treatment
    return True


@dataclass(frozen=True, eq=False)
class TheirBalance:
    """What our lines say at their parameters.

    Attributes
    ----------
    residuals, sigmas : ndarray, shape (4,)
        The four residuals, and each in its own error.
    chi2 : float
    freedom : int
    """

    residuals: np.ndarray
    sigmas: np.ndarray
    chi2: float
    freedom: int


def balance_at_theirs(case: Case) -> TheirBalance:
    """The four residuals of our lines at their parameters; a parameter that they do not give is solved for there."""
    theta = case.theirs_on_our_zero
    nothing = TheirBalance(np.full(4, np.nan), np.full(4, np.nan), float("nan"), 0)
    problem, used = case.problem, case.point.state.used
    given = {name: float(theta[i]) for i, name in enumerate(PARAMETER_NAMES) if np.isfinite(theta[i])}
    absent = [i for i, name in enumerate(PARAMETER_NAMES) if name not in given]
    try:
        if absent:
            found = solve_near(
                with_fixed(problem, SOURCE, **given), np.where(np.isfinite(theta), theta, case.point.theta)
            )
            if not found.known:
                return nothing
            theta = found.theta
        state = problem.balance(theta, used)
    except OutOfGridError:
        return nothing
    usable = np.isfinite(state.residuals) & np.isfinite(np.diag(state.covariance))
    usable[absent] = False
    if not usable.any():
        return nothing
    rows = np.flatnonzero(usable)
    errors = np.sqrt(np.diag(state.covariance))
    residuals = state.residuals
    chi2 = float(residuals[rows] @ np.linalg.solve(state.covariance[np.ix_(rows, rows)], residuals[rows]))
    return TheirBalance(residuals, np.where(np.isfinite(residuals), residuals / errors, np.nan), chi2, rows.size)
