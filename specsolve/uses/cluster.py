"""Members of a cluster prepared for age fitting: common [Fe/H], membership, candidates, shared errors, samples."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from specsolve.balance.outside import Outside
from specsolve.balance.problem import Problem
from specsolve.balance.solution import SOLVED, TIED, Decision, Solution
from specsolve.balance.solve import open_grid
from specsolve.errors import InputError

from .local import Point, candidate_at, point_at, solve_near
from .mixture import CommonMetallicity, Metallicities, candidate_odds, common_metallicity, metallicities
from .results import Results, filled, rebuild, used_lines
from .sequence import Curve, distance
from .shared_errors import list_modes

if TYPE_CHECKING:
    from specsolve.grid.store import ResponseGrid

FEWEST_STARS = 2
MEMBER_FROM = 0.5  # probability from which the common [Fe/H] is fed
DECIDED = 6.0  # minus two ln of odds 20 : 1, as in the rule of the solve
COMPILED_FROM = 30  # stars
FEH = 2  # place in theta
FEH_STEP = 0.02  # dex, for the response to what is fed
FED_SOURCE = "common [Fe/H] of the other members"
Progress = Callable[[int, int], None]


@dataclass(frozen=True, eq=False)
class MemberCandidate:
    """One candidate of a star: its place in the solve, its point, its odds before and with the cluster."""

    index: int
    point: Point
    odds_before: float
    odds: float


@dataclass(frozen=True, eq=False)
class Member:
    """One row of the handoff.

    Attributes
    ----------
    row : int
        In the results.
    name, treatment, status : str
    problem : Problem
    candidates : tuple of MemberCandidate
        The reported one first.
    probability : float
        Of membership.
    before : ndarray, shape (4,)
        Parameters before anything of the cluster came in.
    prior : (float, float)
        [Fe/H] that was fed, and its standard deviation; nan if none was.
    follow : ndarray, shape (4,)
        Change of the parameters when that [Fe/H] changes by one dex.
    decided_by : str
        What settled a tied star.
    sequence : (float, str)
        Distance and labels of the nearest curve.
    decisions : tuple of Decision
        Steps added to the record of the solve.
    """

    row: int
    name: str
    treatment: str
    status: str
    problem: Problem
    candidates: tuple[MemberCandidate, ...]
    probability: float
    before: np.ndarray
    prior: tuple[float, float] = (float("nan"), float("nan"))
    follow: np.ndarray = field(default_factory=lambda: np.zeros(4))
    decided_by: str = ""
    sequence: tuple[float, str] = (float("nan"), "")
    decisions: tuple[Decision, ...] = ()

    @property
    def point(self) -> Point:
        """The reported candidate."""
        return self.candidates[0].point


@dataclass(frozen=True, eq=False)
class Cluster:
    """A cluster ready to be written (`specsolve.uses.handoff`).

    Attributes
    ----------
    members : tuple of Member
        Every star with parameters, members or not, star by star and treatment by treatment.
    modes : ndarray, shape (n_rows, 4, n_modes)
        Errors that all rows share.
    common : dict of str to CommonMetallicity
        By treatment.
    results : Results
    fed : bool
    curves : tuple of Curve
    decided_by_sequence : bool
    notes : tuple of str
    """

    members: tuple[Member, ...]
    modes: np.ndarray
    common: dict[str, CommonMetallicity]
    results: Results
    fed: bool
    curves: tuple[Curve, ...] = ()
    decided_by_sequence: bool = False
    notes: tuple[str, ...] = field(default=())

    @property
    def tied(self) -> tuple[str, ...]:
        """Names of the stars that are still tied."""
        return tuple(member.name for member in self.members if member.status == TIED)


def cluster(
    results: Results | Solution | Iterable[Solution] | str | Path,
    grid: ResponseGrid | str | Path | None = None,
    *,
    feed_metallicity: bool = False,
    sequence: tuple[Curve, ...] = (),
    decide_by_sequence: bool = False,
    progress: Progress | None = None,
) -> Cluster:
    """Prepare the stars of a cluster for age fitting.

    Parameters
    ----------
    results : Results, Solution(s) or path
        Of ``solve``.
    grid : ResponseGrid or path, optional
        The grid of the results, if it was not the packaged one.
    feed_metallicity : bool
        Solve each probable member again with the common [Fe/H] of the OTHER members as a Gaussian term.
    sequence : tuple of Curve, optional
        To be overlaid; distances are given, nothing is decided by them.
    decide_by_sequence : bool
        Weigh the candidates of tied stars by their distance from the sequence. An age that is fitted to the result with
        the same sequence is then fed by its own answer.
    progress : callable, optional
        Called with (done, total) stars.

    Raises
    ------
    SpecsolveError
        Fewer than two stars with parameters, files that are not results of this version, another grid.

    Examples
    --------
    >>> import specsolve
    >>> stars = specsolve.cluster("result.ecsv")                               # doctest: +SKIP
    >>> stars.common["lte"].feh                                                # doctest: +SKIP
    -0.12
    """
    results = Results.of(results)
    rows = [int(i) for i in np.flatnonzero(results.solved)]
    names = {str(results.stars["star"][i]) for i in rows}
    if len(names) < FEWEST_STARS:
        raise InputError(
            f"a cluster needs {FEWEST_STARS} stars with parameters or more; these results have {len(names)}"
            + (f" ({next(iter(names))})" if names else "")
        )
    if decide_by_sequence and not sequence:
        raise InputError("there is no sequence to decide by; give one")
    grid = open_grid(grid)
    problems = rebuild(results, grid, rows, compiled=len(rows) >= COMPILED_FROM)
    members = []
    for i, (row, problem) in enumerate(zip(rows, problems, strict=True)):
        members.append(_member(results, row, problem))
        if progress:
            progress(i + 1, len(rows))
    common: dict[str, CommonMetallicity] = {}
    notes = []
    unfed = list(members)
    for treatment in dict.fromkeys(member.treatment for member in members):
        places = [i for i, member in enumerate(members) if member.treatment == treatment]
        data = _metallicities([members[i] for i in places])
        if len(places) < FEWEST_STARS:
            notes.append(f"{treatment}: one star alone has no common [Fe/H]")
            continue
        found = common_metallicity(data)
        common[treatment] = found
        for k, i in enumerate(places):
            members[i] = _weighed(members[i], found, k, data.field)
            if decide_by_sequence:
                members[i] = _by_sequence(members[i], sequence)
            unfed[i] = members[i]
            if feed_metallicity and members[i].probability >= MEMBER_FROM:
                members[i] = _fed(members[i], found, k)
    modes = _shared_modes(problems, unfed, members, common)
    if sequence:
        members = [
            replace(m, sequence=distance(m.point.theta, m.point.cov_star + m.point.cov_list, sequence)) for m in members
        ]
    notes += _notes(members, modes, feed_metallicity, decide_by_sequence)
    return Cluster(tuple(members), modes, common, results, feed_metallicity, sequence, decide_by_sequence, tuple(notes))


def _member(results: Results, row: int, problem: Problem) -> Member:
    entry = results.stars[row]
    theta = results.theta[row]
    found = reported = [(0, point_at(problem, theta, used_lines(results, row, problem)), 1.0)]
    if entry["status"] == TIED:
        table = results.rows_of(results.candidates, row)
        odds = filled(table["odds"])
        near = np.flatnonzero(np.isfinite(odds) & (odds > 0.0))
        found = []
        for i in near:
            at = np.array([float(table[name][i]) for name in ("teff", "logg", "feh", "vmic")])
            same = int(table["candidate"][i]) == 0
            point = point_at(problem, theta, used_lines(results, row, problem)) if same else candidate_at(problem, at)
            if np.isfinite(point.cov_star).all():
                found.append((int(table["candidate"][i]), point, float(odds[i])))
        found = found or reported
    total = sum(odd for *_, odd in found)
    return Member(
        row=row,
        name=str(entry["star"]),
        treatment=str(entry["treatment"]),
        status=str(entry["status"]),
        problem=problem,
        candidates=tuple(MemberCandidate(i, point, odd / total, odd / total) for i, point, odd in found),
        probability=float("nan"),
        before=theta.copy(),
    )


def _shared_modes(
    problems: list[Problem], unfed: list[Member], members: list[Member], common: dict[str, CommonMetallicity]
) -> np.ndarray:
    """Modes of the shared errors, shape (n_rows, 4, n_modes).

    The common [Fe/H] has the errors of the list too: what a star gets of it follows them, or they would seem to shrink.
    """
    n = len(members)
    if not any(np.isfinite(member.prior[0]) for member in members):
        return list_modes(problems, [member.point for member in members])
    both = list_modes(
        [*problems, *(member.problem for member in members)],
        [*(member.point for member in unfed), *(member.point for member in members)],
    )
    before, modes = both[:n], both[n:].copy()
    for i, member in enumerate(members):
        if np.isfinite(member.prior[0]):
            others = [k for k in range(n) if k != i and members[k].treatment == member.treatment]
            weight = np.array([members[k].probability for k in others])
            mean = weight @ before[others, FEH] / weight.sum()
            modes[i] += np.outer(member.follow, mean)
    return modes


def _metallicities(members: list[Member]) -> Metallicities:
    return metallicities(
        [[c.point.theta[FEH] for c in m.candidates] for m in members],
        [[np.sqrt(c.point.cov_star[FEH, FEH]) for c in m.candidates] for m in members],
        [[c.odds_before for c in m.candidates] for m in members],
    )


def _weighed(member: Member, common: CommonMetallicity, place: int, centre: float) -> Member:
    """The member with its probability, and the candidates of a tied star weighed by the common [Fe/H]."""
    member = replace(member, probability=float(common.membership[place]))
    if len(member.candidates) < 2:
        return member
    values = np.array([c.point.theta[FEH] for c in member.candidates])
    errors = np.array([np.sqrt(c.point.cov_star[FEH, FEH]) for c in member.candidates])
    odds = candidate_odds(values, errors, np.array([c.odds_before for c in member.candidates]), common, place, centre)
    return _reordered(member, odds, "metallicity", FED_SOURCE)


def _by_sequence(member: Member, curves: tuple[Curve, ...]) -> Member:
    if len(member.candidates) < 2:
        return member
    chi2 = [distance(c.point.theta, c.point.cov_star + c.point.cov_list, curves)[0] ** 2 for c in member.candidates]
    log_odds = np.log(np.maximum([c.odds for c in member.candidates], 1e-300)) - 0.5 * np.nan_to_num(chi2, nan=np.inf)
    odds = np.exp(log_odds - log_odds.max())
    return _reordered(member, odds / odds.sum(), "sequence", "distance from the user's sequence")


def _reordered(member: Member, odds: np.ndarray, kind: str, source: str) -> Member:
    """Candidates with new odds, the most likely first if the odds decide; each step recorded."""
    candidates = [replace(c, odds=float(odd)) for c, odd in zip(member.candidates, odds, strict=True)]
    order = np.argsort(-odds, kind="stable")
    gap = 2.0 * float(np.log(max(odds[order[0]], 1e-300) / max(odds[order[1]], 1e-300)))
    decided = gap >= DECIDED
    if decided:
        candidates = [candidates[i] for i in order]
    step = Decision(
        step=0,
        kind=f"cluster_{kind}",
        subject=f"candidate {candidates[0].index}" if decided else "star",
        value=gap,
        threshold=DECIDED,
        outcome="chosen" if decided else "undecided",
        reason=source,
    )
    return replace(
        member,
        candidates=tuple(candidates),
        status=SOLVED if decided else member.status,
        decided_by=kind if decided else member.decided_by,
        decisions=(*member.decisions, step),
    )


def _fed(member: Member, common: CommonMetallicity, place: int) -> Member:
    """Solve the member again with what the others say of its [Fe/H]."""
    if "feh" in member.problem.fixed:
        return member
    mean, sigma = float(common.others[place]), float(common.others_error[place])
    term = Outside.gaussian(FED_SOURCE, feh=(mean, sigma))
    problem = member.problem.replace(outside=(*member.problem.outside, term))
    candidates = []
    for candidate in member.candidates:
        point = solve_near(problem, candidate.point.theta)
        candidates.append(replace(candidate, point=point) if point.known else candidate)
    if candidates[0].point is member.candidates[0].point:
        return member
    theta = candidates[0].point.theta
    moved = solve_near(
        problem.replace(outside=(*member.problem.outside, Outside.gaussian(FED_SOURCE, feh=(mean + FEH_STEP, sigma)))),
        theta,
    )
    step = Decision(
        step=0, kind="outside", subject="feh", value=mean, threshold=sigma, outcome="Gaussian term", reason=FED_SOURCE
    )
    return replace(
        member,
        problem=problem,
        candidates=tuple(candidates),
        prior=(mean, sigma),
        follow=np.nan_to_num((moved.theta - theta) / FEH_STEP),
        decisions=(*member.decisions, step),
    )


def _notes(members: list[Member], modes: np.ndarray, fed: bool, by_sequence: bool) -> list[str]:
    notes = []
    feh_modes = modes[:, FEH]
    spread = float(np.sqrt(np.mean(np.sum((feh_modes - feh_modes.mean(axis=0)) ** 2, axis=1))))
    notes.append(
        f"errors of the list differ by {spread:.3f} dex in [Fe/H] between these stars; scatter and membership use the "
        "stars' own errors alone"
    )
    if fed:
        moved = [m for m in members if np.isfinite(m.prior[0])]
        shift = np.array([m.point.theta - m.before for m in moved]) if moved else np.zeros((1, 4))
        largest = np.abs(shift).max(axis=0)
        notes.append(
            f"the common [Fe/H] of the other members was fed into {len(moved)} solutions: they moved by up to "
            f"{largest[0]:.0f} K, {largest[1]:.3f} dex in logg, {largest[2]:.3f} dex in [Fe/H]; they are no longer "
            "independent of each other"
        )
    else:
        notes.append("the common [Fe/H] was not fed into the solutions")
    if by_sequence:
        notes.append(
            "candidates of tied stars were weighed by their distance from the sequence: an age fitted with the same "
            "sequence would be fed by its own answer"
        )
    tied = [m.name for m in members if m.status == TIED]
    if tied:
        notes.append(f"still tied: {', '.join(tied)}; all their candidates are in the handoff with their odds")
    return notes
