"""Why do published values differ from ours? Differences, the balance that breaks at their parameters, and the causes."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from specsolve.balance.solution import PARAMETER_NAMES, Solution
from specsolve.balance.solve import open_grid
from specsolve.errors import InputError
from specsolve.provenance import collect
from specsolve.schema_uses import CAUSES

from .causes import Differences, Verdict, name_causes
from .counterfactuals import (
    Case,
    Shares,
    TheirBalance,
    applicable,
    balance_at_theirs,
    split,
    vector,
)
from .crosscheck_tables import make_tables
from .local import point_at
from .names import match_names
from .published import Published, read_published
from .results import Results, rebuild, used_lines
from .shared_errors import list_modes, reduced

if TYPE_CHECKING:
    from astropy.table import Table

    from specsolve.grid.store import ResponseGrid

COMPILED_FROM = 30  # stars; a star takes about ten solves
MODES_IN_FIT = 12  # shared errors of a set are smooth over the stars: a few modes hold them
Progress = Callable[[int, int], None]


@dataclass(frozen=True, eq=False)
class SetComparison:
    """A set of stars compared.

    Attributes
    ----------
    cases : tuple of Case
    modes : ndarray, shape (n_stars, 4, n_modes)
    differences : Differences
    verdict : Verdict
    named : tuple of str
        Causes in force: stated ones and named ones.
    shares : tuple of Shares
    balances : tuple of TheirBalance
    """

    cases: tuple[Case, ...]
    modes: np.ndarray
    differences: Differences
    verdict: Verdict
    named: tuple[str, ...]
    shares: tuple[Shares, ...]
    balances: tuple[TheirBalance, ...]


@dataclass(frozen=True, eq=False)
class CrossCheck:
    """Everything that ``crosscheck`` writes.

    Attributes
    ----------
    tables : dict of str to Table
        Kinds crosscheck, crosscheck_causes, crosscheck_set, crosscheck_verdicts.
    sets : dict of str to SetComparison
        By treatment.
    unmatched_ours, unmatched_theirs : tuple of str
    notes : tuple of str
    """

    tables: dict[str, Table]
    sets: dict[str, SetComparison]
    unmatched_ours: tuple[str, ...]
    unmatched_theirs: tuple[str, ...]
    notes: tuple[str, ...] = field(default=())


def compare_set(
    cases: Sequence[Case],
    *,
    same_lines: bool = False,
    causes: Sequence[str] | None = None,
    progress: Progress | None = None,
) -> SetComparison:
    """Compare one set of stars with what is published of them.

    Parameters
    ----------
    cases : sequence of Case
    same_lines : bool
        They used our lines and log gf, so that errors of the list cancel in the difference.
    causes : sequence of str, optional
        Split by these causes instead of those that are named.
    progress : callable, optional
        Called with (done, total) stars.
    """
    kinds: dict[str, str] = {}
    for case in cases:
        kinds |= applicable(case)
    kinds = {cause: kinds[cause] for cause in CAUSES if cause in kinds}
    vectors = {cause: np.full((len(cases), 4), np.nan) for cause in kinds}
    stated = [c for c, said in (("solar_iron", "states_solar_iron"), ("treatment", "states_treatment"))
              if c in kinds and any(getattr(case, said) for case in cases)]  # fmt: skip
    for i, case in enumerate(cases):
        possible = applicable(case)
        for cause in kinds:
            unsaid = cause == "treatment" and cause in stated and not case.states_treatment
            if cause in possible and not unsaid:
                vectors[cause][i] = vector(case, cause)
            elif cause in ("solar_iron", "treatment"):
                vectors[cause][i] = 0.0
        if progress:
            progress(i + 1, 2 * len(cases))
    modes = list_modes([case.problem for case in cases], [case.point for case in cases])
    covariances = np.array([case.covariance_star for case in cases])
    exact = ~(np.einsum("ijj->ij", covariances) > 0.0)  # fixed in our solve and exact on their side: nothing to compare
    differences = Differences(
        values=np.where(exact, np.nan, [case.difference for case in cases]),
        covariances=covariances + np.eye(4) * exact[:, :, None],
        modes=np.zeros((len(cases), 4, 1)) if same_lines else reduced(modes, MODES_IN_FIT),
        vectors=vectors,
        kinds=kinds,
        stated=tuple(stated),
    )
    verdict = name_causes(differences)
    named = verdict.best.causes if causes is None else tuple(c for c in causes if c in kinds)
    amplitudes = _amplitudes(differences, verdict, named)
    shares = []
    for i, case in enumerate(cases):
        shares.append(split(case, named, amplitudes))
        if progress:
            progress(len(cases) + i + 1, 2 * len(cases))
    balances = tuple(balance_at_theirs(case) for case in cases)
    return SetComparison(tuple(cases), modes, differences, verdict, named, tuple(shares), balances)


def _amplitudes(differences: Differences, verdict: Verdict, named: Sequence[str]) -> dict[str, float]:
    """Fitted shifts of the scales in force, also of those that a user asked for."""
    if set(named) <= set(verdict.best.causes):
        return verdict.best.amplitudes
    from .causes import fit_causes

    return fit_causes(differences, named).amplitudes


def crosscheck(
    results: Results | Solution | Iterable[Solution] | str | Path,
    published: Published | str | Path | Table,
    grid: ResponseGrid | str | Path | None = None,
    *,
    columns: Mapping[str, str] | None = None,
    same_lines: bool = False,
    causes: Sequence[str] | None = None,
    progress: Progress | None = None,
) -> CrossCheck:
    """Compare results with published parameters and say why they differ.

    Parameters
    ----------
    results : Results, Solution(s) or path
        Of ``solve``; a path is that of ``X.ecsv``.
    published : Published, table or path
        See `read_published`.
    grid : ResponseGrid or path, optional
        The grid of the results, if it was not the packaged one.
    columns : mapping, optional
        Headings of the published table.
    same_lines : bool
        The published analysis used the same lines and log gf: errors of the list cancel.
    causes : sequence of str, optional
        Split by these instead of the causes that the differences themselves name.
    progress : callable, optional

    Returns
    -------
    CrossCheck

    Raises
    ------
    SpecsolveError
        No common star, names that are double, columns or units that cannot be read, another grid.

    Examples
    --------
    >>> import specsolve
    >>> found = specsolve.crosscheck("result.ecsv", "paper.ecsv")              # doctest: +SKIP
    >>> found.tables["crosscheck_verdicts"].pprint()                           # doctest: +SKIP
    """
    results = Results.of(results)
    if not isinstance(published, Published):
        published = read_published(published, columns)
    for cause in causes or ():
        if cause not in CAUSES:
            raise InputError(f"'{cause}' is not a cause; there are {', '.join(CAUSES)}")
    grid = open_grid(grid)
    ours = list(dict.fromkeys(results.stars["star"].tolist()))
    pairs = match_names(ours, published.names)
    if not pairs:
        raise InputError(
            f"no star of the results is in the published table: {', '.join(ours[:4])} against "
            f"{', '.join(published.names[:4])}"
        )
    place = {ours[i]: k for i, k in pairs.items()}
    rows = [i for i in np.flatnonzero(results.solved) if results.stars["star"][i] in place]
    if not rows:
        raise InputError("none of the common stars is solved")
    problems = rebuild(results, grid, rows, compiled=len(rows) >= COMPILED_FROM)
    by_treatment: dict[str, list[Case]] = {}
    for row, problem in zip(rows, problems, strict=True):
        k = place[problem.star.name]
        point = point_at(problem, results.theta[row], used_lines(results, row, problem))
        case = Case(
            problem.star.name,
            published.names[k],
            problem,
            point,
            published.theta[k].copy(),
            published.errors[k],
            float(published.solar_iron[k]),
            published.treatments[k],
        )
        by_treatment.setdefault(problem.treatment, []).append(case)
    sets = {
        treatment: compare_set(cases, same_lines=same_lines, causes=causes, progress=progress)
        for treatment, cases in by_treatment.items()
    }
    provenance = collect(
        inputs=[*results.paths[:1], *([published.path] if published.path else [])],
        options={"same_lines": same_lines, "causes": list(causes or ())},
        grid={"identity": grid.identity, "description": grid.description},
    )
    notes = _notes(published, pairs)
    tables = make_tables(sets, same_lines, provenance)
    return CrossCheck(
        tables,
        sets,
        tuple(name for name in ours if name not in place),
        tuple(name for k, name in enumerate(published.names) if k not in place.values()),
        notes,
    )


def _notes(published: Published, pairs: Mapping[int, int]) -> tuple[str, ...]:
    rows = sorted(pairs.values())
    given = np.isfinite(published.theta[rows])
    without = (given & ~np.isfinite(published.errors[rows])).any(axis=0)
    names = [name for name, absent in zip(PARAMETER_NAMES, without, strict=True) if absent]
    notes = []
    if names:
        notes.append(f"no published error of {', '.join(names)} for some stars: counted as zero")
    if len(rows) < 5:
        notes.append(
            f"{len(rows)} star{'s' if len(rows) > 1 else ''}: a held parameter and a shifted scale can hardly be told apart"
        )
    return tuple(notes)
