"""The local continuum: knots, first estimate, and unpredicted absorption that noise must not imitate."""

import numpy as np
import pytest

from specsolve.spectrum.continuum import (
    Unpredicted,
    corrected,
    expected_unpredicted,
    first_estimate,
    make_knots,
    noise_probability,
)


def test_hats_reproduce_straight_lines_and_skip_gaps():
    wave = np.concatenate([np.linspace(5000.0, 5030.0, 300), np.linspace(5100.0, 5120.0, 200)])
    order = np.zeros(wave.size, int)
    knots = make_knots(wave, order, 10.0)
    assert not np.any((knots.wavelength > 5045.0) & (knots.wavelength < 5085.0))
    np.testing.assert_allclose(knots.evaluate(2.0 + 0.1 * knots.wavelength), 2.0 + 0.1 * wave)


def test_orders_have_knots_of_their_own():
    wave = np.concatenate([np.linspace(5000.0, 5040.0, 100), np.linspace(5030.0, 5060.0, 100)])
    order = np.repeat([0, 1], 100)
    knots = make_knots(wave, order, 10.0)
    values = np.where(knots.order == 0, 1.0, 3.0)
    np.testing.assert_allclose(knots.evaluate(values), np.where(order == 0, 1.0, 3.0))


def test_first_estimate_looks_between_the_lines(rng):
    wave = np.linspace(5000.0, 5060.0, 3000)
    model = np.ones(wave.size)
    for centre in rng.uniform(5000.0, 5060.0, 60):
        model -= 0.5 * np.exp(-(((wave - centre) / 0.08) ** 2)) * (model > 0.5)
    level = 500.0 * (1.0 + 0.1 * (wave - 5030.0) / 30.0)
    flux = level * (model + 0.01 * rng.standard_normal(wave.size))
    flux[100] = 5e4  # a cosmic ray
    knots = make_knots(wave, np.zeros(wave.size, int), 10.0)
    found = first_estimate(knots, flux, 0.01 * level, np.ones(wave.size, bool), model)
    # at the ends half a hat stands for its end: a quarter of 10 Angstrom of this slope is 1 %, and 1 % noise
    np.testing.assert_allclose(found, level, rtol=0.03)


@pytest.mark.parametrize("sigma", [0.003, 0.01, 0.033])
def test_noise_alone_keeps_its_weight(rng, sigma):
    """Without unknown absorption the weighted mean of pure noise stays within 0.1 sigma of zero."""
    deviation = rng.standard_normal(200000)
    unpredicted = Unpredicted(0.02, 0.05)
    for _ in range(10):
        probability = noise_probability(deviation, np.full(deviation.size, sigma), unpredicted)
        unpredicted = corrected(Unpredicted(0.02, 0.05), probability, np.full(deviation.size, sigma))
    shift = np.sum(probability * deviation) / np.sum(probability)
    assert abs(shift) < 0.1 * min(1.0, 0.02 / sigma + 0.5)


def test_unknown_absorption_of_the_expected_kind_leaves_the_level(rng, figure):
    """A mixture as assumed: the level that the probabilities give back is off by less than 0.1 % of the continuum."""
    sigma, truth = 0.01, Unpredicted(0.10, 0.05)
    data = 1.0 + sigma * rng.standard_normal(100000)
    hit = rng.random(data.size) < truth.part
    data[hit] -= rng.exponential(truth.depth, hit.sum())
    level = np.median(data)
    plain = np.mean(data)
    for _ in range(60):
        p = noise_probability((data - level) / sigma, np.full(data.size, sigma), truth)
        level = np.sum(p * data) / np.sum(p)
    figure("level with 10 % of the pixels absorbed by 5 %", level - 1.0, "of the continuum", limit="0.001")
    assert abs(level - 1.0) < 1e-3
    assert plain < 0.996


def test_expectation_follows_the_predicted_lines():
    crowded = np.tile([0.0, 0.1, 0.2, 0.3], 100)
    lonely = np.zeros(400)
    lonely[:4] = 0.1
    assert expected_unpredicted(crowded, 0.15).part > 10 * expected_unpredicted(lonely, 0.15).part
    assert expected_unpredicted(lonely, 0.15).part >= 1e-3
