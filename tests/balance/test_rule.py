"""The tie-break rule on stars that are ambiguous by construction: seldom wrong without saying "tied", odds that hold.

Beside it runs the plain rule "the candidate whose lines scatter least".
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import pytest

from specsolve.balance.minima import search
from specsolve.balance.options import Options
from specsolve.balance.problem import Problem
from specsolve.balance.tiebreak import SAME_ANSWER_FLAG, rank
from tests.balance.folded import CENTRE, folded_grid, folded_star

STARS = 1000
WIDE = Options(reduced_width_range=(-6.6, -4.5))  # the invented lines follow no observer's choice
NEAR = 6.0
SURE = 20.0 / 21.0  # odds of 20 : 1
WORST_ODDS_EXCESS = 0.15  # beyond three binomial errors; see the comment where it is used
BINS = np.array([0.0, 0.1, 0.25, 0.5, 0.75, 0.9, 1.0])


@dataclass(frozen=True)
class Case:
    """One ambiguous star: status, whether the reported candidate is on the truth's side, odds, and the plain rule's verdict."""

    tied: bool
    right: bool
    odds: np.ndarray
    true: np.ndarray
    plain_right: bool


def case_of(problem: Problem, truth: np.ndarray) -> Case | None:
    """The case, or None if the star is not ambiguous: fewer than two distinct near-equal answers."""
    found = search(problem)
    if not found.found:
        return None
    ranking = rank(problem, found)
    answers = [(i, c) for i, c in enumerate(ranking.candidates) if not c.set_aside and SAME_ANSWER_FLAG not in c.flags]
    best = max((c.log_likelihood for _, c in answers), default=0.0)
    near = [(i, c) for i, c in answers if 2.0 * (best - c.log_likelihood) < NEAR]
    if len(near) < 2:
        return None
    side = np.sign(truth[0] - CENTRE)
    true = np.array([np.sign(c.parameters[0] - CENTRE) == side for _, c in near])
    if true.sum() != 1:  # both candidates on one side, or the truth's own minimum is not among the near-equal
        return None if true.sum() > 1 else Case(ranking.status == "tied", False, np.zeros(0), np.zeros(0, bool), False)
    scatter = [_scatter(ranking.found[i]) for i, _ in near]
    return Case(
        tied=ranking.status == "tied",
        right=bool(np.sign(ranking.candidates[0].parameters[0] - CENTRE) == side),
        odds=np.array([c.odds for _, c in near]),
        true=true,
        plain_right=bool(true[int(np.argmin(scatter))]),
    )


def _scatter(item) -> float:
    state = item.minimum.state
    return float(np.std(state.weighting.deviation[state.used]))


def cases(number: int, seed: int, folder) -> list[Case]:
    """Ambiguous stars, `number` of them."""
    grid, odd = folded_grid(folder)
    rng = np.random.default_rng(seed)
    out: list[Case] = []
    for k in range(20 * number):
        star, truth = folded_star(grid, odd, rng, f"twin {k}")
        case = case_of(Problem(star=star, grid=grid, options=WIDE, compiled=True), truth)
        if case is not None:
            out.append(case)
        if len(out) == number:
            break
    return out


@pytest.mark.slow
def test_the_rule_on_ambiguous_stars(slow_fraction, seed, tmp_path, figure):
    number = max(60, round(STARS * slow_fraction))
    found = cases(number, seed, tmp_path)
    assert len(found) == number
    decided = [c for c in found if not c.tied]
    wrong = np.mean([not c.tied and not c.right for c in found])
    sure = [c for c in found if c.odds.size and c.odds.max() > SURE]
    tied_though_sure = np.mean([c.tied for c in sure]) if sure else 0.0
    plain_wrong = np.mean([not c.plain_right for c in found])
    figure(f"{number} ambiguous stars: wrong while not tied", 100 * wrong, "%", limit="2")
    figure(f"tied where the odds exceed 20 : 1 ({len(sure)} stars)", 100 * tied_though_sure, "%", limit="10")
    figure("tied of all", 100 * np.mean([c.tied for c in found]), "%")
    figure(f"wrong of the {len(decided)} decided", 100 * np.mean([not c.right for c in decided] or [0.0]), "%")
    figure("plain rule, least scatter of lines: wrong", 100 * plain_wrong, "%")
    odds, true = (np.concatenate([getattr(c, name) for c in found]) for name in ("odds", "true"))
    known = np.isfinite(odds)
    odds, true = odds[known], true[known].astype(float)
    worst = 0.0
    for low, high in pairwise(BINS):
        inside = (odds >= low) & (odds < high + (high == 1.0))
        if inside.sum() < 10:
            continue
        stated, held = odds[inside].mean(), true[inside].mean()
        error = np.sqrt(max(stated * (1.0 - stated), 0.25 / inside.sum()) / inside.sum())
        worst = max(worst, abs(held - stated) - 3.0 * error)
        verdict = "" if abs(held - stated) <= 3.0 * error else ": NOT MET"
        words = f"odds {low:g}-{high:g} ({inside.sum()}): stated {stated:.3f}, held"
        figure(words, held, limit=f"{stated:.3f} +- {3.0 * error:.3f}{verdict}")
    # A run on few stars has room for one bad draw. 360 stars of one seed held their odds (0.63: 0.61, 0.84: 0.83,
    # 0.95: 0.92), 120 of another were off by up to 0.19; a bin beyond three binomial errors is recorded as NOT MET.
    slack = 2.0 / number if slow_fraction < 1.0 else 0.0
    assert wrong <= 0.02 + slack
    assert tied_though_sure <= 0.10 + slack
    assert worst <= WORST_ODDS_EXCESS
    assert plain_wrong > wrong


def test_two_minima_within_their_errors_are_one_answer(tmp_path):
    """A star at the fold: both sides meet there, and the rule does not call that a tie."""
    grid, odd = folded_grid(tmp_path)
    rng = np.random.default_rng(2)
    for k in range(40):
        star, _ = folded_star(grid, odd, rng, f"fold {k}", teff=CENTRE + 15.0)
        ranking = rank(*_searched(star, grid))
        marked = [c for c in ranking.candidates if SAME_ANSWER_FLAG in c.flags]
        if marked:
            step = next(d for d in ranking.decisions if d.kind == "same_answer")
            assert step.value < step.threshold
            assert np.isnan(marked[0].odds)
            return
    pytest.fail("no star at the fold had two minima within their errors")


def _searched(star, grid):
    problem = Problem(star=star, grid=grid, options=WIDE)
    return problem, search(problem)


def test_the_rule_is_deterministic(tmp_path):
    grid, odd = folded_grid(tmp_path)
    star, _ = folded_star(grid, odd, np.random.default_rng(4), "twice")
    first, second = (rank(*_searched(star, grid)) for _ in range(2))
    assert first.decisions == second.decisions
    for a, b in zip(first.candidates, second.candidates, strict=True):
        assert a.parameters.tobytes() == b.parameters.tobytes()
        assert (a.odds == b.odds) or (np.isnan(a.odds) and np.isnan(b.odds))
