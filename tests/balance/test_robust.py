"""Robust weights and the line-to-line term."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import integrate, stats

from specsolve.balance.robust import (
    HUBER_K,
    MAX_LINE_TO_LINE_DEX,
    huber_consistency,
    huber_weights,
    line_to_line_term,
    line_to_line_terms,
    robust_weights,
    student_weights,
)
from specsolve.balance.uncertainty import HUBER_INEFFICIENCY


def test_huber_constant_gives_95_percent_efficiency():
    """Huber 1981 (from memory): k = 1.345 has 95 % efficiency at the normal distribution."""
    inner = stats.norm.cdf(HUBER_K) - stats.norm.cdf(-HUBER_K)
    assert huber_consistency() / inner**2 == pytest.approx(1.0 / 0.95, abs=2e-3)


def test_consistency_against_quadrature():
    value, _ = integrate.quad(lambda z: min(z * z, HUBER_K**2) * stats.norm.pdf(z), -12.0, 12.0, points=[-1.345, 1.345])
    assert huber_consistency() == pytest.approx(value, rel=1e-9)


def test_inefficiency_of_frozen_weights():
    def mean(function):
        return integrate.quad(lambda z: function(z) * stats.norm.pdf(z), -12.0, 12.0, points=[-1.345, 1.345])[0]

    def weight(z):
        return float(huber_weights(np.array(z)))

    frozen = mean(lambda z: weight(z) ** 2) / mean(weight) ** 2
    true = huber_consistency() / (stats.norm.cdf(HUBER_K) - stats.norm.cdf(-HUBER_K)) ** 2
    assert true / frozen == pytest.approx(HUBER_INEFFICIENCY, abs=0.01)


@pytest.mark.parametrize("loss", ["huber", "student"])
def test_influence_never_redescends_for_huber_and_stays_bounded(loss):
    z = np.linspace(0.0, 40.0, 4001)
    influence = robust_weights(z, loss) * z
    assert influence.max() < 3.0
    if loss == "huber":
        assert (np.diff(influence) >= -1e-12).all()
    assert robust_weights(np.array([np.nan]), loss)[0] == 0.0


def test_student_weight_at_known_points():
    np.testing.assert_allclose(student_weights(np.array([0.0, 1.0, 4.0])), [1.25, 1.0, 0.25])


@pytest.mark.parametrize("bad", [0.0, 0.1])
def test_line_to_line_term_is_recovered_with_and_without_blends(rng, bad):
    n, s, known = 3000, 0.06, 0.03
    deviation = rng.normal(size=n) * np.hypot(s, known)
    blended = rng.random(n) < bad
    deviation = deviation + np.where(blended, 0.5, 0.0)
    found = line_to_line_term(deviation, np.full(n, known**2), 3)
    # statistical error about s/sqrt(2n) = 0.001; one-sided blends of 7 sigma in a tenth of the lines inflate by up
    # to a third
    assert found == pytest.approx(s, abs=0.004 if bad == 0.0 else 0.022)
    if bad:
        assert found < 0.5 * np.std(deviation)


def test_known_errors_that_suffice_leave_no_term(rng):
    assert line_to_line_term(rng.normal(size=400) * 0.02, np.full(400, 0.05**2), 3) == 0.0


def test_no_degrees_of_freedom_is_nan():
    assert np.isnan(line_to_line_term(np.array([0.1, -0.1]), np.full(2, 1e-4), 3))


def test_absurd_scatter_ends_at_the_limit(rng):
    assert line_to_line_term(rng.normal(size=50) * 30.0, np.full(50, 1e-4), 3) == MAX_LINE_TO_LINE_DEX


def test_few_second_ion_lines_share_the_term(rng):
    deviation = np.r_[rng.normal(size=60) * 0.05, rng.normal(size=5) * 0.2]
    is_fe2 = np.r_[np.zeros(60, bool), np.ones(5, bool)]
    terms = line_to_line_terms(is_fe2, deviation, np.full(65, 1e-4), np.ones(65, bool))
    assert terms[0] == terms[1]
    many = np.r_[deviation[:60], rng.normal(size=30) * 0.2]
    is_fe2 = np.r_[np.zeros(60, bool), np.ones(30, bool)]
    terms = line_to_line_terms(is_fe2, many, np.full(90, 1e-4), np.ones(90, bool))
    assert terms[1] > 2.0 * terms[0]
