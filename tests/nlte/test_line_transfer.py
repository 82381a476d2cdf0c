"""The compiled kernel of line transfer against dense matrices; points and profiles of the lines."""

import numpy as np
import pytest

from specsolve.nlte.acceleration import History
from specsolve.nlte.line_grid import sinh_points
from specsolve.nlte.line_transfer import line_field_reference, line_fields
from specsolve.radiation.transfer import ANGLE_COSINES, ANGLE_WEIGHTS


@pytest.mark.parametrize("strength", [1e-3, 1.0, 1e4])
def test_kernel_agrees_with_dense_matrices(strength):
    rng = np.random.default_rng(5)
    n, q = 40, 7
    column = 10.0 ** np.linspace(-4, 2, n)
    log_b = rng.normal(0.0, 0.3, (2, n))
    boltzmann = np.exp(-rng.uniform(2.0, 6.0, (1, n)))
    profile = np.exp(-(np.linspace(0, 3, q) ** 2)) * rng.uniform(0.9, 1.1, (1, n, q))
    quadrature = profile / profile.sum(axis=2, keepdims=True)
    background = 10.0 ** rng.uniform(-1, 0, (1, n))
    background_source = rng.uniform(0.5, 1.5, (1, n))
    lines = strength * rng.uniform(0.5, 2.0, (1, n))
    effective, diagonal = np.empty((1, n)), np.empty((1, n))
    line_fields(
        np.array([0]), np.array([1]), log_b, lines, boltzmann, np.array([2.0]), background, background_source,
        profile, quadrature, column, ANGLE_COSINES, ANGLE_WEIGHTS, effective, diagonal,
    )  # fmt: skip
    b_up = np.exp(log_b[1]) * boltzmann[0]
    net = np.exp(log_b[0]) - b_up
    source = 2.0 * b_up / net
    mean, local = np.zeros(n), np.zeros(n)
    for f in range(q):
        of_line = lines[0] * net * profile[0, :, f]
        total = of_line + background[0]
        j, star = line_field_reference(
            total,
            (of_line * source + background[0] * background_source[0]) / total,
            column,
            ANGLE_COSINES,
            ANGLE_WEIGHTS,
        )
        mean += quadrature[0, :, f] * j
        local += quadrature[0, :, f] * star * of_line / total
    np.testing.assert_allclose(diagonal[0], local, rtol=1e-9)
    np.testing.assert_allclose(effective[0], mean - local * source, rtol=1e-8, atol=1e-9 * mean.max())


def test_frequencies_start_at_the_centre_and_reach_the_end():
    end = np.array([3.0, 30.0, 300.0])
    points = sinh_points(end)
    np.testing.assert_allclose(points[:, 0], 0.0)
    np.testing.assert_allclose(points[:, -1], end)
    np.testing.assert_allclose(points[:, 1], 0.5, rtol=1e-6)


def test_acceleration_finds_the_limit_of_two_geometric_sequences():
    x = np.array([0.1, 0.2, -0.1])
    matrix = np.diag([0.9, 0.6, 0.9])
    history = History()
    for _ in range(5):
        x = history.accelerated(matrix @ x)
    assert np.max(np.abs(x)) < 1e-6
