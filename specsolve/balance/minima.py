"""All candidates that the search finds: refined starting points, with duplicates merged and line cuts fixed."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from specsolve.errors import NotEnoughLinesError

from .certificate import Certificate
from .newton import STEP_UNIT, Minimum, refine
from .problem import Problem, common_abundances
from .scan import Scan, scan_nodes, starts_from_scan

PRELIMINARY_MARGIN_DEX = 0.15  # how much wider the first cut, on measured widths, is than the one on predicted widths
SAME_MINIMUM = 0.02  # ends closer than this in STEP_UNIT are one minimum: 5 K, 0.01 dex, 0.01 km/s
REASON_PREDICTED = "predicted_strength_cut"
REASON_MEASURED = "measured_strength_cut"
MIN_FE1_LINES = 4  # the plane has three coefficients
EDGE_FLAG, BESIDE_MISSING_FLAG = 1, 2


@dataclass(frozen=True, eq=False)
class FoundMinimum:
    """A candidate before ranking.

    Attributes
    ----------
    minimum : Minimum
    allowed : ndarray of bool, shape (n_lines,)
        Lines kept by the cut on predicted strength, frozen.
    seeds : int
        Starting points that led here.
    flags : tuple of str
    """

    minimum: Minimum
    allowed: np.ndarray
    seeds: int
    flags: tuple[str, ...]


@dataclass(frozen=True, eq=False)
class Search:
    """What the search looked at and found.

    Attributes
    ----------
    found : tuple of FoundMinimum
    preliminary : ndarray of bool, shape (n_lines,)
        Lines of the wide cut on measured widths.
    n_nodes, n_seeds, n_refined : int
    failures : tuple of str
        Why starting points led nowhere.
    certificate : Certificate
    """

    found: tuple[FoundMinimum, ...]
    preliminary: np.ndarray
    n_nodes: int
    n_seeds: int
    n_refined: int
    failures: tuple[str, ...] = field(default=())
    certificate: Certificate = field(default_factory=Certificate)


def preliminary_lines(problem: Problem) -> np.ndarray:
    """Lines within the cut on strength, widened, on measured widths; bool, shape (n_lines,)."""
    low, high = problem.options.reduced_width_range
    x = problem.inputs.log_reduced_width
    return (x >= low - PRELIMINARY_MARGIN_DEX) & (x <= high + PRELIMINARY_MARGIN_DEX)


def predicted_lines(problem: Problem, minimum: Minimum, preliminary: np.ndarray) -> np.ndarray:
    """Lines within the cut on predicted strength at a minimum; bool, shape (n_lines,)."""
    low, high = problem.options.reduced_width_range
    state, is_fe2 = minimum.state, problem.inputs.is_fe2
    common = common_abundances(is_fe2, state.relative_abundance, state.weighting.weights)
    predicted = problem.predicted_widths(state.theta, common)
    inside = (predicted >= low) & (predicted <= high)  # false for nan
    return preliminary & inside


def local_solve(problem: Problem, start: np.ndarray, preliminary: np.ndarray) -> tuple[Minimum, np.ndarray]:
    """Refine with the wide cut, fix the cut on predicted strength there, refine again."""
    if problem.compiled and problem.linear_outside:
        from .bulk import local_compiled

        return local_compiled(problem, start, preliminary, least_lines(problem))
    return finish(problem, refine(problem, start, preliminary, rough=True), preliminary)


def finish(problem: Problem, rough: Minimum, preliminary: np.ndarray) -> tuple[Minimum, np.ndarray]:
    """The second half of `local_solve`: freeze the cut on predicted strength where the first ended, and refine."""
    if rough.state is None:
        return rough, preliminary
    if problem.compiled and problem.linear_outside:
        from .bulk import finish_compiled

        return finish_compiled(problem, rough, preliminary, least_lines(problem))
    allowed = predicted_lines(problem, rough, preliminary)
    if not enough_lines(problem, allowed):
        allowed = preliminary
    minimum = refine(problem, rough.theta, allowed, previous=rough.state)
    return (rough, preliminary) if minimum.state is None else (minimum, allowed)


def least_lines(problem: Problem) -> tuple[int, int]:
    """How many lines of each ion the residuals that the free parameters need take (Outside terms not counted)."""
    needs_slopes = "teff" not in problem.fixed or "vmic" not in problem.fixed
    outside = {term.name for item in problem.outside for term in item.terms}
    return MIN_FE1_LINES if needs_slopes else 1, 0 if "logg" in problem.fixed or "logg" in outside else 1


def enough_lines(problem: Problem, allowed: np.ndarray) -> bool:
    """Whether these lines can form every residual that the free parameters need (Outside terms not counted)."""
    is_fe2 = problem.inputs.is_fe2
    least = least_lines(problem)
    return int((allowed & ~is_fe2).sum()) >= least[0] and int((allowed & is_fe2).sum()) >= least[1]


def shortage(problem: Problem, allowed: np.ndarray) -> tuple[str, dict[str, int]]:
    """What is missing, in words, and the counts; for an error."""
    is_fe2 = problem.inputs.is_fe2
    counts = {
        problem.pair[0]: int((allowed & ~is_fe2).sum()),
        problem.pair[1]: int((allowed & is_fe2).sum()),
    }
    found = ", ".join(f"{n} {ion}" for ion, n in counts.items())
    if counts[problem.pair[1]] == 0 and counts[problem.pair[0]] >= MIN_FE1_LINES and "logg" not in problem.fixed:
        return f"no usable {problem.pair[1]} line ({found}): the gravity is undetermined; fix logg", counts
    return f"too few usable lines ({found}): at least {MIN_FE1_LINES} {problem.pair[0]} lines are needed", counts


def search(problem: Problem) -> Search:
    """Scan the grid, refine every starting point, merge what is one minimum."""
    preliminary = preliminary_lines(problem)
    if not enough_lines(problem, preliminary):
        message, counts = shortage(problem, preliminary)
        raise NotEnoughLinesError(message, counts=counts)
    scan: Scan = scan_nodes(problem, preliminary)
    starts = starts_from_scan(problem, scan)
    seeds = starts.seeds
    found: list[FoundMinimum] = []
    failures: list[str] = []
    refined = failed = same = 0
    reached: list[tuple[np.ndarray, int]] = []  # ends of first refinements, and the candidate that each led to
    for seed in seeds[: problem.options.max_seeds]:
        rough = refine(problem, seed.theta, preliminary, rough=True)
        refined += 1
        if rough.state is None:
            failures.append(rough.failure)
            failed += 1
            continue
        known = next((place for theta, place in reached if _same(theta, rough.theta)), None)
        if known is not None:
            found[known] = replace(found[known], seeds=found[known].seeds + seed.count)
            same += 1
            continue
        minimum, allowed = finish(problem, rough, preliminary)
        for i, other in enumerate(found):
            if _same(minimum.theta, other.minimum.theta):
                found[i] = replace(other, seeds=other.seeds + seed.count)
                reached.append((rough.theta, i))
                same += 1
                break
        else:
            reached.append((rough.theta, len(found)))
            found.append(FoundMinimum(minimum, allowed, seed.count, minimum_flags(problem, minimum, preliminary)))
    flags = [set(item.flags) for item in found]
    certificate = Certificate(
        n_nodes=scan.n_nodes,
        n_blank=starts.n_blank,
        n_cells=starts.n_cells,
        n_partial=starts.n_partial,
        n_kept=starts.n_kept,
        n_landed=starts.n_landed,
        n_lattice=starts.n_lattice,
        n_starts=len(seeds),
        n_refined=refined,
        n_failed=failed,
        n_same=same,
        n_distinct=len(found),
        n_edge=sum("at_grid_edge" in item for item in flags),
        n_beside_missing=sum("beside_missing_node" in item for item in flags),
        n_stopped=sum(bool(item & {"outside_grid", "stopped_by_missing_node"}) for item in flags),
    )
    return Search(
        certificate=certificate,
        found=tuple(found),
        preliminary=preliminary,
        n_nodes=scan.n_nodes,
        n_seeds=len(seeds),
        n_refined=refined,
        failures=tuple(dict.fromkeys(failures)),
    )


def _same(first: np.ndarray, second: np.ndarray) -> bool:
    return bool(np.all(np.abs(first - second) < SAME_MINIMUM * STEP_UNIT))


def minimum_flags(problem: Problem, minimum: Minimum, preliminary: np.ndarray) -> tuple[str, ...]:
    """Flags of a refined minimum."""
    flags = []
    state = minimum.state
    if minimum.blocked:
        flags.append("stopped_by_missing_node")
    elif not minimum.converged:
        flags.append("not_converged")
    if minimum.at_bound[problem.free].any():
        flags.append("outside_grid")
    formed = np.count_nonzero(problem.active & np.isfinite(state.residuals))
    if formed + problem.outside_terms(state.theta)[0].size < problem.free.size:
        flags.append("undetermined")
    bits = int(np.bitwise_or.reduce(state.flags[state.used])) if state.used.any() else 0
    if bits & EDGE_FLAG:
        flags.append("at_grid_edge")
    if bits & BESIDE_MISSING_FLAG:
        flags.append("beside_missing_node")
    if (preliminary & ~np.isfinite(state.abundance)).any():
        flags.append("lines_outside_table")
    if not state.weighting.settled:
        flags.append("weights_not_settled")
    return tuple(flags)
