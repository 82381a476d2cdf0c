"""Injected causes are named, false ones are not.

Two ways. Sets drawn from a pool of solved invented stars: their real covariances, shared errors and counterfactual responses,
noise and causes put in to first order, many sets. And whole sets analysed twice from independent spectra with the cause at
work in the second analysis, few. A set is ten stars; a cause amounts to at least three errors of the difference in one star
(the other line formation: whatever it is there).
"""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.uses.causes import HELD, KNOWN, SCALE, Differences, name_causes
from specsolve.uses.counterfactuals import Case, vector
from specsolve.uses.crosscheck import compare_set
from specsolve.uses.handoff import root
from specsolve.uses.shared_errors import list_modes, reduced
from tests.uses.invented import GF_ERROR, draw_theta, invented_set, observed, solved_problem, widths_of

KINDS = {
    "held_teff": HELD, "held_logg": HELD, "zero_point": SCALE, "fe2_scale": SCALE, "treatment": KNOWN
}  # fmt: skip
INJECTED = ("fe2_scale", "zero_point", "held_logg", "treatment")
N_POOL, MOST_ATTEMPTS, N_STARS, SIZE = 26, 80, 10, 3.0
N_SINGLE, N_NULL, N_DOUBLE = 200, 50, 50


@pytest.fixture(scope="module")
def pool(grid):
    """Solved stars, half of them metal-poor, with the response to every cause."""
    rng = np.random.default_rng(20)
    gf_error = rng.normal(0.0, GF_ERROR, len(grid.lines))
    cases, vectors = [], []
    for attempt in range(MOST_ATTEMPTS):
        if len(cases) == N_POOL:
            break
        theta = draw_theta(rng, metal_poor=attempt % 2 == 1)
        star = observed(grid, f"pool {len(cases)}", widths_of(grid, "lte", theta, gf_error), rng)
        problem, point = solved_problem(grid, star, theta, compiled=False)
        if not (point.known and np.isfinite(point.cov_star).all()):
            continue
        case = Case(star.name, star.name, problem, point, point.theta.copy(), np.sqrt(np.diag(point.cov_star)))
        found = {cause: vector(case, cause) for cause in KINDS}
        if all(np.isfinite(one).all() for one in found.values()):
            cases.append(case)
            vectors.append(found)
    assert len(cases) >= 2 * N_STARS
    modes = reduced(list_modes([c.problem for c in cases], [c.point for c in cases]), 12)
    return cases, vectors, modes


def drawn(pool, rng, causes: tuple[str, ...]) -> Differences:
    """A set of stars of the pool, its published side made by another noise and by causes."""
    cases, vectors, modes = pool
    places = rng.choice(len(cases), N_STARS, replace=False)
    if "treatment" in causes:  # the shift is below the noise in metal-rich stars: a set of metal-poor ones
        poor = [i for i in range(len(cases)) if cases[i].point.theta[2] < -0.5]
        places = rng.choice(poor, min(N_STARS, len(poor)), replace=False)
    own = np.array([cases[i].point.cov_star for i in places])
    found = {cause: np.array([vectors[i][cause] for i in places]) for cause in KINDS}
    values = np.array([root(2.0 * one) @ rng.standard_normal(4) for one in own])
    for cause in causes:
        sign = rng.choice([-1.0, 1.0])
        if KINDS[cause] == KNOWN:
            values = values + found[cause]
        elif KINDS[cause] == SCALE:
            lever = np.max(np.abs(found[cause]) / np.sqrt(2.0 * np.einsum("ijj->ij", own)), axis=1)
            values = values + sign * SIZE / np.median(lever) * found[cause]
        else:
            wrong = (
                SIZE
                * np.sqrt(2.0 * own[:, 1, 1])
                * rng.uniform(1.0, 1.5, len(places))
                * rng.choice([-1.0, 1.0], len(places))
            )
            values = values + (wrong - values[:, 1])[:, None] * found[cause]
    published = np.einsum("ijj->ij", own)[:, :, None] * np.eye(4)  # a paper gives single errors
    return Differences(values, own + published, modes[places], found, KINDS)


def count(pool, rng, causes: tuple[str, ...], number: int) -> tuple[float, float, list]:
    """Fractions in which exactly these causes are named, and in which they are among the named or their rivals."""
    exact = among = 0
    verdicts = []
    for _ in range(number):
        verdict = name_causes(drawn(pool, rng, causes))
        named = set(verdict.best.causes)
        exact += named == set(causes)
        among += set(causes) <= named or any(set(causes) <= set(rival.causes) for rival in verdict.rivals)
        verdicts.append(verdict.best.causes)
    return exact / number, among / number, verdicts


def test_some_sets(pool, rng):
    for cause in INJECTED:
        _, among, verdicts = count(pool, rng, (cause,), 2)
        assert among > 0.0, verdicts
    assert count(pool, rng, (), 4)[0] >= 0.75


@pytest.mark.slow
def test_injected_causes(pool, rng, figure):
    right = []
    for cause in INJECTED:
        exact, among, verdicts = count(pool, rng, (cause,), N_SINGLE // len(INJECTED))
        figure(f"{cause} injected: named, of {len(verdicts)}", 100.0 * exact, "%", limit="95")
        figure(f"{cause} injected: named or a rival", 100.0 * among, "%")
        right.append(exact)
    figure(f"injected causes named, of {N_SINGLE}", 100.0 * np.mean(right), "%", limit=">= 95")
    null, _, verdicts = count(pool, rng, (), N_NULL)
    figure(f"a false cause named, of {N_NULL} without", 100.0 * (1.0 - null), "%", limit="<= 5")
    assert np.mean(right) >= 0.95
    assert 1.0 - null <= 0.05


@pytest.mark.slow
def test_double_causes(pool, rng, figure):
    pairs = (
        ("fe2_scale", "zero_point"),
        ("zero_point", "held_logg"),
        ("fe2_scale", "held_logg"),
        ("zero_point", "treatment"),
    )
    for pair in pairs:
        both = one = 0
        number = N_DOUBLE // len(pairs) + 1
        for _ in range(number):
            named = set(name_causes(drawn(pool, rng, pair)).best.causes)
            both += named == set(pair)
            one += bool(named & set(pair))
        figure(
            f"{pair[0]} and {pair[1]} injected: both named and nothing else, of {number}", 100.0 * both / number, "%"
        )
        figure(f"{pair[0]} and {pair[1]} injected: one of them named at least", 100.0 * one / number, "%")
        assert one / number > 0.8


@pytest.mark.slow
def test_whole_sets_analysed_twice(grid, rng, figure):
    right = total = 0
    for cause in INJECTED:
        for _ in range(3):
            cases, _ = invented_set(grid, rng, (cause,))
            named = compare_set(cases).named
            right += named == (cause,)
            total += 1
    false = sum(bool(compare_set(invented_set(grid, rng)[0]).named) for _ in range(3))
    figure(
        f"whole sets analysed twice: the injected cause is named, of {total}", 100.0 * right / total, "%", limit="95"
    )
    figure("whole sets analysed twice: a false cause, of 3", float(false), limit="0")
    assert right / total >= 0.75
    assert false <= 1
