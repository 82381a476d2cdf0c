"""Which candidate is reported, by a rule in four steps, each recorded in the decisions.

The rule
--------
0. All minima of the search are candidates. What is known from elsewhere is in already: it took part in finding them, and
   below "ln L" stands for the density of the measured widths on the lines that all candidates have in common, times
   the Gaussian of the Outside terms.
1. Set aside (kept in the list, with the reason) is a candidate that lies at a face of the grid, whose way led into missing
   nodes, that did not converge, or whose lines leave a parameter undetermined; beside a missing node too, if there are
   others. If nothing is left, the best of them is reported with status "outside_grid" or "unsolved".
2. Near-equal to the best are candidates with 2 (ln L_best - ln L) < 6, odds of 20 : 1. Two of them that differ by less
   than the errors of either (squared distance in its covariance of star and list below 1) are one answer: the better
   stands for both, the other is marked "same_answer". If one answer is left, it is reported.
3. Else a published relation of vmic with teff and logg enters each of them as a Gaussian, as wide as the scatter
   about the relation (0.20 km/s, giants 0.25) and the candidate's own error of vmic in quadrature. If the best is then better
   than the second by 6 or more, it is reported. The step is skipped if vmic is fixed, if the option `vmic_relation` is
   off, or if one of the candidates lies outside the range of the relations (`specsolve.balance.relations`).
4. Else the star is "tied": the candidates are listed, the most likely first, with odds proportional to
   L x prior x sqrt|Cov| (the mass of each, not its peak; the prior is the relation where step 3 applied), and the exit
   code of the program says so. A tied star carries the parameters of the first, with the status beside them.

Everything is a function of the widths alone: no random number, no order of lines or of starting points takes part;
exact equality is broken by the parameters in ascending order.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from .minima import FoundMinimum, Search
from .problem import Problem
from .relations import minus_two_log_prior, vmic_relation
from .solution import SOLVED, TIED, Candidate, Decision
from .uncertainty import parameter_covariances

SETTING_ASIDE = (
    ("outside_grid", "the minimum lies at the edge of the grid"),
    ("stopped_by_missing_node", "the way to the minimum leads into missing nodes of the grid; fix a parameter"),
    ("not_converged", "the refinement did not converge"),
    ("undetermined", "the lines that have an abundance there do not determine all parameters"),
)
SAME_ANSWER = 1.0  # squared distance, in the errors of star and list, below which two minima are one answer
SAME_ANSWER_FLAG = "same_answer"
BESIDE_MISSING = ("beside_missing_node", "beside a missing node of the grid")


@dataclass(frozen=True, eq=False)
class Ranking:
    """Candidates in their order of report, with what was decided.

    Attributes
    ----------
    found : tuple of FoundMinimum
        In the order of `candidates`.
    candidates : tuple of Candidate
    decisions : tuple of Decision
    status : str
        "solved" or "tied".
    decided_by_relation : bool
    """

    found: tuple[FoundMinimum, ...]
    candidates: tuple[Candidate, ...]
    decisions: tuple[Decision, ...]
    status: str
    decided_by_relation: bool


def set_aside_reason(flags: tuple[str, ...], others: bool = True) -> str:
    """Why step 1 sets a candidate aside; empty if it does not.

    Parameters
    ----------
    flags : tuple of str
    others : bool
        There are candidates that lie neither outside nor beside a missing node; without them one beside a missing
        node, where
        interpolation is one-sided but does not reach across, is reported and flagged.
    """
    rules = (*SETTING_ASIDE, BESIDE_MISSING) if others else SETTING_ASIDE
    return next((text for flag, text in rules if flag in flags), "")


def rank(problem: Problem, search: Search) -> Ranking:
    """Apply the rule. `search.found` must not be empty."""
    found = search.found
    common = search.preliminary.copy()
    others = any(not set_aside_reason(item.flags) for item in found)
    considered = [item for item in found if not set_aside_reason(item.flags, others)] or list(found)
    for item in considered:
        common &= np.isfinite(item.minimum.state.abundance)
    rows = [_candidate(problem, item, common, set_aside_reason(item.flags, others)) for item in found]
    order = sorted(
        range(len(found)),
        key=lambda i: (
            bool(rows[i].set_aside),
            rows[i].chi2 if rows[i].set_aside else -_posterior(problem, rows[i]),
            *rows[i].parameters.tolist(),
        ),
    )
    found = tuple(found[i] for i in order)
    rows = [rows[i] for i in order]
    log: list[tuple] = [
        (
            "search",
            "grid",
            float(search.n_refined),
            float(problem.options.max_seeds),
            f"{len(found)} found",
            search.certificate.words(),
        )
    ]
    for i, row in enumerate(rows):
        if row.set_aside:
            log.append(("set_aside", _name(i), row.chi2, float("nan"), "set aside", row.set_aside))
    eligible = [i for i, row in enumerate(rows) if not row.set_aside]
    status, by_relation, chosen = SOLVED, False, 0
    odds: dict[int, float] = {}
    if not eligible:
        log.append(
            (
                "choose",
                _name(0),
                rows[0].chi2,
                float("nan"),
                "reported",
                "every candidate is set aside; the best of them",
            )
        )
    else:
        deltas = {i: 2.0 * (_posterior(problem, rows[0]) - _posterior(problem, rows[i])) for i in eligible}
        close = [i for i in eligible if deltas[i] < problem.options.near_equal] or eligible[:1]
        for i in eligible[1:]:
            word = "near-equal" if i in close else "rejected"
            log.append(
                (
                    "likelihood",
                    _name(i),
                    deltas[i],
                    problem.options.near_equal,
                    word,
                    "2 (ln L_best - ln L) on common lines",
                )
            )
        near = []
        for i in close:
            twin, distance = _nearest_answer(problem, rows, near, i)
            if distance < SAME_ANSWER:
                rows[i] = replace(rows[i], flags=(*rows[i].flags, SAME_ANSWER_FLAG))
                log.append(
                    (
                        "same_answer",
                        _name(i),
                        distance,
                        SAME_ANSWER,
                        _name(twin),
                        "differs from a better candidate by less than the errors",
                    )
                )
            else:
                near.append(i)
        odds = _odds(problem, rows, near)
        if len(near) == 1:
            log.append(
                ("choose", _name(0), 0.0, problem.options.near_equal, "chosen", "no other answer is near the best")
            )
        else:
            chosen, by_relation, entry = _relation_step(problem, rows, near)
            log.append(entry)
            if chosen < 0:
                status, chosen = TIED, 0
                log.append(
                    (
                        "tied",
                        "star",
                        float(len(near)),
                        1.0,
                        "tied",
                        "the rule cannot separate the near-equal candidates",
                    )
                )
    best = rows[chosen]
    candidates = [
        replace(
            row,
            delta=2.0 * (_posterior(problem, best) - _posterior(problem, row)) if not row.set_aside else float("nan"),
            odds=odds.get(i, float("nan")),
        )
        for i, row in enumerate(rows)
    ]
    if chosen:
        move = [chosen] + [i for i in range(len(rows)) if i != chosen]
        candidates, found = [candidates[i] for i in move], tuple(found[i] for i in move)
        names = {_name(old): _name(new) for new, old in enumerate(move)}
        log = [
            (kind, names.get(subject, subject), value, threshold, names.get(outcome, outcome), reason)
            for kind, subject, value, threshold, outcome, reason in log
        ]
    candidates = [replace(row, index=i) for i, row in enumerate(candidates)]
    decisions = tuple(
        Decision(
            step=step, kind=kind, subject=subject, value=value, threshold=threshold, outcome=outcome, reason=reason
        )
        for step, (kind, subject, value, threshold, outcome, reason) in enumerate(log, start=1)
    )
    return Ranking(found, tuple(candidates), decisions, status, by_relation)


def _name(index: int) -> str:
    return f"candidate {index}"


def _nearest_answer(problem: Problem, rows: list[Candidate], answers: list[int], i: int) -> tuple[int, float]:
    """The answer nearest to a candidate, and the squared distance in the covariance that makes it larger."""
    found = (-1, np.inf)
    for k in answers:
        away = (rows[i].parameters - rows[k].parameters)[problem.free]
        distance = max(_squared_distance(problem, one, away) for one in (rows[i], rows[k]))
        found = min(found, (k, distance), key=lambda pair: pair[1])
    return found


def _squared_distance(problem: Problem, row: Candidate, away: np.ndarray) -> float:
    block = row.covariance[np.ix_(problem.free, problem.free)]
    sigma = np.sqrt(np.diag(block))
    if not (np.isfinite(sigma).all() and (sigma > 0.0).all()):
        return float("inf")
    away = away / sigma
    return float(away @ np.linalg.pinv(block / np.outer(sigma, sigma), hermitian=True) @ away)


def _posterior(problem: Problem, row: Candidate) -> float:
    terms, _ = problem.outside_terms(row.parameters)
    return row.log_likelihood - 0.5 * float(terms @ terms)


def _candidate(problem: Problem, item: FoundMinimum, common: np.ndarray, set_aside: str) -> Candidate:
    minimum = item.minimum
    star, shared = parameter_covariances(problem, minimum.state)
    likelihood = problem.log_likelihood(minimum.theta, common)
    return Candidate(
        index=0,
        parameters=minimum.theta,
        covariance=star + shared,
        residuals=minimum.state.residuals,
        chi2=minimum.objective,
        log_likelihood=likelihood if np.isfinite(likelihood) else float("-inf"),
        delta=float("nan"),
        odds=float("nan"),
        n_lines=int(minimum.state.used.sum()),
        n_seeds=item.seeds,
        flags=item.flags,
        set_aside=set_aside,
        iterations=minimum.iterations,
    )


def _log_mass(problem: Problem, row: Candidate, with_relation: bool) -> float:
    value = _posterior(problem, row)
    block = row.covariance[np.ix_(problem.free, problem.free)]
    known = np.isfinite(block).all()
    sign, log_determinant = np.linalg.slogdet(block) if problem.free.size and known else (1.0, 0.0)
    if sign > 0.0 and np.isfinite(log_determinant):
        value += 0.5 * log_determinant
    if with_relation:
        relation = vmic_relation(row.parameters[0], row.parameters[1])
        value -= 0.5 * minus_two_log_prior(row.parameters[3], _vmic_variance(row), relation)
    return value


def _vmic_variance(row: Candidate) -> float:
    variance = float(row.covariance[3, 3])
    return variance if np.isfinite(variance) else 0.0


def _relation_applies(problem: Problem, rows: list[Candidate], near: list[int]) -> bool:
    return (
        problem.options.vmic_relation
        and "vmic" not in problem.fixed
        and all(vmic_relation(rows[i].parameters[0], rows[i].parameters[1]) is not None for i in near)
    )


def _odds(problem: Problem, rows: list[Candidate], near: list[int]) -> dict[int, float]:
    with_relation = len(near) > 1 and _relation_applies(problem, rows, near)
    masses = np.array([_log_mass(problem, rows[i], with_relation) for i in near])
    shares = np.exp(masses - masses.max())
    return dict(zip(near, (shares / shares.sum()).tolist(), strict=True))


def _relation_step(problem: Problem, rows: list[Candidate], near: list[int]) -> tuple[int, bool, tuple]:
    limit = problem.options.near_equal
    if not _relation_applies(problem, rows, near):
        return (
            -1,
            False,
            (
                "vmic_relation",
                "star",
                float("nan"),
                limit,
                "skipped",
                "switched off, vmic fixed, or a near-equal candidate lies outside the range of the relation",
            ),
        )
    scores, sources = {}, set()
    for i in near:
        relation = vmic_relation(rows[i].parameters[0], rows[i].parameters[1])
        prior = minus_two_log_prior(rows[i].parameters[3], _vmic_variance(rows[i]), relation)
        scores[i] = -2.0 * _posterior(problem, rows[i]) + prior
        sources.add(relation.source)
    first, second = sorted(near, key=lambda i: scores[i])[:2]
    gap = scores[second] - scores[first]
    decided = gap >= limit
    return (
        first if decided else -1,
        decided,
        (
            "vmic_relation",
            _name(first) if decided else "star",
            gap,
            limit,
            "chosen" if decided else "undecided",
            "published vmic relation: " + "; ".join(sorted(sources)),
        ),
    )
