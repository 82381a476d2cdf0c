"""Joint samples: the same density as an independent sampler walks on, the odds of tied candidates, the seed."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from specsolve.balance import samples
from specsolve.balance.minima import search
from specsolve.balance.options import Options
from specsolve.balance.outside import Outside
from specsolve.balance.posterior import Posterior
from specsolve.balance.problem import Problem
from specsolve.balance.samples import joint_samples
from specsolve.balance.solve import solve_problem
from specsolve.balance.tiebreak import rank
from specsolve.balance.uncertainty import student_half_width
from tests.balance.conftest import make_star

WIDE = Options(reduced_width_range=(-6.6, -4.5))
TRUTH = np.array([4710.0, 2.35, -0.4, 1.55])


@pytest.fixture(autouse=True)
def few_draws(request, monkeypatch):
    """Small rounds: enough to see what is asked here; the slow comparison has the full ones."""
    if request.node.get_closest_marker("slow") is None:
        monkeypatch.setattr(samples, "FIRST_ROUND", 60)
        monkeypatch.setattr(samples, "BATCH", 50)


@pytest.fixture(scope="module")
def problem(interpolator):
    rng = np.random.default_rng(8)
    star = make_star(interpolator, TRUTH, rng=rng, abundance_error=0.05, width_error=0.04, stated_error=0.04)
    return Problem(star=star, grid=interpolator.grid, options=WIDE)


@pytest.fixture(scope="module")
def ranking(problem):
    return rank(problem, search(problem))


def test_samples_have_centre_and_spread_of_the_solution(problem, ranking):
    """The density is sharper in vmic than the estimate, which uses slopes alone, and its centre is another estimate."""
    found = joint_samples(problem, ranking.candidates, ranking.found, 80, np.random.default_rng(1))
    assert len(found) == 80
    best = ranking.candidates[0]
    sigma = np.sqrt(np.diag(best.covariance))
    away = (found.parameters.mean(axis=0) - best.parameters) / sigma
    spread = found.parameters.std(axis=0) / sigma
    assert (np.abs(away) < 1.3).all()
    assert ((spread > 0.4) & (spread < 1.5)).all()
    assert (found.candidate == 0).all()
    assert 0.02 < found.efficiency <= 1.0


def test_the_seed_decides(problem, ranking):
    one, same, other = (
        joint_samples(problem, ranking.candidates, ranking.found, 8, np.random.default_rng(seed)) for seed in (3, 3, 4)
    )
    assert one.parameters.tobytes() == same.parameters.tobytes()
    assert not np.array_equal(one.parameters, other.parameters)


def test_tied_candidates_share_the_samples_by_their_odds(problem, ranking):
    best = dataclasses.replace(ranking.candidates[0], odds=0.75)
    far = best.parameters + 40.0 * np.sqrt(np.diag(best.covariance)) * np.array([1.0, 1.0, 1.0, 0.0])
    twin = dataclasses.replace(best, index=1, odds=0.25, parameters=far)
    found = joint_samples(problem, (best, twin), ranking.found[:1] * 2, 60, np.random.default_rng(2))
    # The twin borrows the minimum of the first: all of its draws lie nearer to the first, and none is taken for it.
    assert set(found.candidate) == {0}
    assert 30 < len(found) < 58


def test_a_fixed_parameter_stays(problem):
    fixed = problem.replace(outside=(Outside.fixed("invented", logg=2.35, vmic=1.55),))
    solution = solve_problem(fixed.replace(options=dataclasses.replace(WIDE, samples=20, seed=5)))
    assert len(solution.samples) == 20
    assert (solution.samples.parameters[:, 1] == 2.35).all()
    assert (solution.samples.parameters[:, 3] == 1.55).all()
    assert solution.samples.parameters[:, 0].std() > 0.0


def test_density_is_zero_at_the_candidate_and_undefined_outside(problem, ranking):
    density = Posterior(problem, ranking.found[0])
    theta = ranking.found[0].minimum.theta
    assert density.log_density(theta) == pytest.approx(0.0, abs=1e-9)
    assert density.log_density(theta + np.array([1e4, 0.0, 0.0, 0.0])) == -np.inf


def test_outside_knowledge_is_in_the_samples(problem):
    known = problem.replace(outside=(Outside.gaussian("invented", teff=(4710.0, 5.0)),))
    ranked = rank(known, search(known))
    found = joint_samples(known, ranked.candidates, ranked.found, 60, np.random.default_rng(1))
    assert found.parameters[:, 0].std() == pytest.approx(5.0, rel=0.4)


def test_student_factor():
    """Half-widths of the central 68.27 % interval of Student's t, from scipy; the expansion errs by less than 1 %."""
    from scipy.stats import t

    for freedom in (3.0, 5.0, 10.0, 30.0):
        exact = t.ppf(0.5 + 0.5 * 0.682689, freedom)
        assert student_half_width(np.array([1.0 / freedom]))[0] == pytest.approx(exact, rel=0.01)


@pytest.mark.slow
def test_against_an_independent_sampler(problem, ranking, figure):
    """emcee (Foreman-Mackey et al. 2013, PASP 125, 306) on the same density; agreement within its own Monte Carlo error."""
    import emcee

    density = Posterior(problem, ranking.found[0])
    best = ranking.candidates[0]
    sigma = np.sqrt(np.diag(best.covariance))
    start = 0.3 * np.random.default_rng(1).normal(size=(24, 4))
    walkers = emcee.EnsembleSampler(24, 4, lambda z: density.log_density(best.parameters + sigma * z))
    walkers.random_state = np.random.RandomState(1).get_state()
    walkers.run_mcmc(start, 500)
    chain = walkers.get_chain(discard=100, flat=True)
    effective = len(chain) / float(np.mean(walkers.get_autocorr_time(discard=100, quiet=True)))
    mine = joint_samples(problem, ranking.candidates, ranking.found, 600, np.random.default_rng(2))
    z = (mine.parameters - best.parameters) / sigma
    error = np.hypot(chain.std(axis=0) / np.sqrt(effective), z.std(axis=0) / np.sqrt(len(z)))
    pull = (z.mean(axis=0) - chain.mean(axis=0)) / error
    figure("mean of samples against emcee, worst", np.abs(pull).max(), "Monte Carlo errors", limit="4")
    ratio = z.std(axis=0) / chain.std(axis=0)
    figure("spread of samples over emcee, worst", ratio[np.argmax(np.abs(ratio - 1.0))], limit="1 +- 0.15")
    assert np.abs(pull).max() < 4.0
    np.testing.assert_allclose(ratio, 1.0, atol=0.15)
    np.testing.assert_allclose(np.corrcoef(z.T), np.corrcoef(chain.T), atol=0.15)
