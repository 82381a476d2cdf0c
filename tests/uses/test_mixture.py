"""The mixture against another way to the same posterior, and its coverage on drawn clusters."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import qmc

from specsolve.uses.mixture import (
    LARGEST_FIELD_SHARE,
    LARGEST_SCATTER,
    candidate_odds,
    common_metallicity,
    log_likelihood,
    metallicities,
    star_log_likelihood,
)


def drawn(rng, n=14, feh=-0.2, scatter=0.03, strangers=2):
    errors = rng.uniform(0.02, 0.05, n)
    values = feh + rng.normal(0.0, np.hypot(errors, scatter))
    values[:strangers] = rng.uniform(-1.2, -0.7, strangers)
    return metallicities([[v] for v in values], [[e] for e in errors], [[1.0]] * n)


def test_the_grid_agrees_with_weighted_quasi_random_points(rng):
    """The same likelihood summed over 2^15 Sobol points of the prior: both agree to their own accuracy, 3 % of a sigma."""
    data = drawn(rng)
    found = common_metallicity(data)
    unit = qmc.Sobol(3, seed=1).random_base2(15)
    feh = found.feh + (unit[:, 0] - 0.5) * 14.0 * found.feh_error
    scatter, share = unit[:, 1] * LARGEST_SCATTER, unit[:, 2] * LARGEST_FIELD_SHARE
    parts = [
        star_log_likelihood(v, e, o, data.field, feh, scatter, share)
        for v, e, o in zip(data.values, data.errors, data.odds, strict=True)
    ]
    total = np.sum([np.logaddexp(*part) for part in parts], axis=0)
    assert total[0] == pytest.approx(log_likelihood(data, feh[0], scatter[0], share[0]))
    weight = np.exp(total - total.max())
    weight /= weight.sum()
    mean = weight @ feh
    assert found.feh == pytest.approx(mean, abs=0.05 * found.feh_error)
    assert found.feh_error == pytest.approx(np.sqrt(weight @ (feh - mean) ** 2), rel=0.05)
    assert found.field_share == pytest.approx(weight @ share, abs=0.01)
    membership = [weight @ np.exp(p[0] - np.logaddexp(*p)) for p in parts]
    np.testing.assert_allclose(found.membership, membership, atol=0.01)


def test_strangers_do_not_belong_and_the_mean_is_covered(rng, figure):
    pulls, strangers, members = [], [], []
    for _ in range(15):
        found = common_metallicity(drawn(rng))
        pulls.append((found.feh + 0.2) / found.feh_error)
        strangers += found.membership[:2].tolist()
        members += found.membership[2:].tolist()
    figure(
        "common [Fe/H], rms of difference over error, 15 drawn clusters", np.sqrt(np.mean(np.square(pulls))), limit="1"
    )
    figure("mean membership of drawn strangers", np.mean(strangers), limit="0")
    figure("mean membership of drawn members", np.mean(members), limit="1")
    assert 0.6 < np.sqrt(np.mean(np.square(pulls))) < 1.4
    assert np.mean(strangers) < 0.1
    assert np.mean(members) > 0.85


def test_the_others_settle_a_tied_star(rng):
    data = drawn(rng, strangers=0)
    values, errors, odds = list(data.values), list(data.errors), list(data.odds)
    values[3], errors[3], odds[3] = np.array([-0.21, -0.62]), np.array([0.04, 0.04]), np.array([0.4, 0.6])
    both = metallicities(values, errors, odds)
    found = common_metallicity(both)
    weighed = candidate_odds(values[3], errors[3], odds[3], found, 3, both.field)
    assert weighed[0] > 0.95
    assert weighed.sum() == pytest.approx(1.0)
    # What a star itself says does not come back to it.
    alone = common_metallicity(metallicities(values[:3] + values[4:], errors[:3] + errors[4:], odds[:3] + odds[4:]))
    assert found.others[3] == pytest.approx(alone.feh, abs=0.1 * alone.feh_error)
