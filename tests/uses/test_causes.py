"""Causes named from differences alone: vectors of real shape, noise drawn from the stated errors."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.uses.causes import HELD, KNOWN, SCALE, Differences, name_causes

N_STARS = 10
KINDS = {"held_teff": HELD, "held_logg": HELD, "zero_point": SCALE, "fe2_scale": SCALE, "treatment": KNOWN}


def vectors(rng) -> dict[str, np.ndarray]:
    """Responses of about the size that solves give: (teff, logg, feh, vmic) for a unit of each cause."""
    spread = rng.uniform(0.7, 1.3, (N_STARS, 4))
    base = {
        "held_teff": [1.0, 0.0022, 0.0008, 0.0006],
        "held_logg": [60.0, 1.0, 0.03, -0.10],
        "zero_point": [-4.0, -0.05, -1.0, 0.02],
        "fe2_scale": [120.0, 2.3, 0.10, -0.25],
        "treatment": [60.0, 0.28, 0.09, 0.06],
    }
    made = {name: np.array(one) * spread for name, one in base.items()}
    made["held_teff"][:, 0] = made["held_logg"][:, 1] = 1.0
    return made


def drawn(rng, causes: tuple[str, ...], size: float = 3.0) -> Differences:
    sigma = np.array([45.0, 0.10, 0.035, 0.07])
    correlation = np.eye(4)
    correlation[0, 1] = correlation[1, 0] = 0.8
    correlation[0, 2] = correlation[2, 0] = 0.7
    correlation[1, 2] = correlation[2, 1] = 0.5
    covariance = correlation * np.outer(sigma, sigma)
    found = vectors(rng)
    values = rng.multivariate_normal(np.zeros(4), covariance, N_STARS)
    modes = rng.normal(1.0, 0.2, (N_STARS, 4, 2)) * np.array([10.0, 0.03, 0.02, 0.02])[:, None]
    values = values + np.einsum("ijk,k->ij", modes, rng.standard_normal(2))
    for cause in causes:
        sign = rng.choice([-1.0, 1.0])
        if KINDS[cause] == KNOWN:
            values += found[cause]
        elif KINDS[cause] == SCALE:
            lever = np.max(np.abs(found[cause]) / sigma, axis=1)
            values += sign * size / np.median(lever) * found[cause]
        else:
            place = 0 if cause == "held_teff" else 1
            amount = size * sigma[place] * rng.uniform(1.0, 1.5, N_STARS) * rng.choice([-1.0, 1.0], N_STARS)
            values += (amount - values[:, place])[:, None] * found[cause]
    return Differences(values, np.tile(covariance, (N_STARS, 1, 1)), modes, found, KINDS)


@pytest.mark.parametrize("cause", ["held_logg", "zero_point", "fe2_scale", "treatment"])
def test_one_cause_is_named(cause, rng):
    named = [name_causes(drawn(rng, (cause,))).best.causes for _ in range(4)]
    assert sum(found == (cause,) for found in named) >= 3


def test_nothing_is_named_without_a_cause(rng):
    named = [name_causes(drawn(rng, ())).best.causes for _ in range(8)]
    assert sum(bool(found) for found in named) <= 1


def test_a_constant_error_of_gravity_and_a_shifted_scale_are_said_to_be_alike(rng):
    one = drawn(rng, ("fe2_scale",))
    same = {name: np.tile(v.mean(axis=0), (N_STARS, 1)) for name, v in one.vectors.items()}
    same["held_logg"] = same["fe2_scale"] / same["fe2_scale"][:, [1]]
    verdict = name_causes(Differences(one.values, one.covariances, one.modes, same, KINDS))
    assert verdict.best.causes == ("fe2_scale",)
    assert ("held_logg",) in [rival.causes for rival in verdict.rivals]


def test_errors_that_are_too_small_are_said(rng):
    one = drawn(rng, ())
    small = Differences(one.values, one.covariances / 9.0, one.modes * 0.0, one.vectors, KINDS)
    assert name_causes(small).best.factor > 3.0


@pytest.mark.slow
def test_many_sets(rng, figure):
    """200 sets with one cause, 50 with none, 50 with two; first order, no solver."""
    single = [c for c in ("held_logg", "zero_point", "fe2_scale", "treatment") for _ in range(50)]
    right = np.mean([name_causes(drawn(rng, (cause,))).best.causes == (cause,) for cause in single])
    false = np.mean([bool(name_causes(drawn(rng, ())).best.causes) for _ in range(50)])
    pair = ("fe2_scale", "zero_point")
    both = np.mean([set(name_causes(drawn(rng, pair)).best.causes) == set(pair) for _ in range(50)])
    figure("first order: injected cause named and nothing else, of 200", 100.0 * right, "%", limit=">= 95")
    figure("first order: a false cause named, of 50", 100.0 * false, "%", limit="<= 5")
    figure("first order: both of two causes named and nothing else, of 50", 100.0 * both, "%")
    assert right >= 0.95
    assert false <= 0.05
