"""The structure solver: limits known on paper, and invariance against the start."""

from __future__ import annotations

import numpy as np
import pytest

from specsolve.atmosphere import energy
from specsolve.atmosphere.blanketing import load_blanketing
from specsolve.atmosphere.build import wanted_nodes
from specsolve.atmosphere.channels import Channels
from specsolve.atmosphere.start import STANDARD_LOG_TAU, grey_temperature
from specsolve.atmosphere.structure import gas_pressure, opacity_vmic, solve_structure
from specsolve.constants import STEFAN_BOLTZMANN
from specsolve.matter.composition import composition_for


def test_grey_atmosphere_reaches_the_hopf_surface(monkeypatch):
    """Grey radiative equilibrium has T(0) / Teff = (sqrt(3) / 4)^(1/4) = 0.8112 (Mihalas 1978, section 3-3)."""

    def grey(temperature, pressure, composition, blanketing, vmic, power):
        from specsolve.matter.equation_of_state import equilibrium

        one = np.ones((1, len(temperature)))
        thermal = one * STEFAN_BOLTZMANN * temperature**4 / np.pi
        return Channels(opacity=one, destruction=one, thermal=thermal, reference_opacity=one[0],
                        gas=equilibrium(temperature, pressure, composition))  # fmt: skip

    monkeypatch.setattr(energy, "channels", grey)
    monkeypatch.setattr(energy, "convective_flux", lambda gradient, *rest: np.zeros_like(gradient))
    teff, gravity = 5772.0, 10**4.44
    mass = 10.0**STANDARD_LOG_TAU
    log_t = np.log(grey_temperature(teff, mass))
    for _ in range(12):
        balance = energy.energy_balance(
            log_t, gravity * mass, mass, teff, gravity, composition_for(0.0), None, 1.0, 1.0
        )
        log_t = log_t + np.linalg.solve(balance.jacobian, -balance.residual)
    assert balance.flux_error < 1e-8
    assert np.exp(log_t[0]) / teff == pytest.approx(0.8112, rel=0.01)
    tau = mass  # Eddington limit deep down: T^4 = 3/4 Teff^4 (tau + 0.7104)
    np.testing.assert_allclose(np.exp(log_t[-10:]), teff * (0.75 * (tau[-10:] + 0.7104)) ** 0.25, rtol=2e-3)


def test_hydrostatic_pressure_without_radiation():
    mass = np.logspace(-4, 1, 30)
    np.testing.assert_allclose(gas_pressure(mass, 1e4, np.zeros(30)), 1e4 * mass, rtol=1e-12)


def test_opacity_microturbulence_law():
    assert opacity_vmic(4.5) == pytest.approx(1.08, abs=0.01)
    assert opacity_vmic(1.5) == pytest.approx(1.97, abs=0.01)


def test_low_gravities_are_asked_for_in_cool_stars_only():
    nodes = wanted_nodes([4500.0, 5250.0], [0.0, 0.5])
    assert (4500.0, 0.0) in nodes
    assert (5250.0, 0.0) not in nodes
    assert (5250.0, 0.5) in nodes


def test_two_starts_give_one_sun():
    """Cold start, and from a star 400 K cooler with a quarter of the gravity: the same structure within 1 K."""
    composition, blanketing = composition_for(0.0), load_blanketing(0.0)
    cold = solve_structure(5772.0, 4.44, composition, blanketing)
    cool = solve_structure(5400.0, 3.8, composition, blanketing)
    warm = solve_structure(5772.0, 4.44, composition, blanketing, start=cool)
    assert cold.status == warm.status == "converged", (cold.reason, warm.reason)
    assert cold.flux_error < 1e-5
    assert warm.flux_error < 1e-5
    np.testing.assert_allclose(
        np.interp(STANDARD_LOG_TAU, warm.log_tau, warm.temperature),
        np.interp(STANDARD_LOG_TAU, cold.log_tau, cold.temperature), atol=1.0,
    )  # fmt: skip


def test_impossible_star_fails_with_its_reason():
    """6500 K at log g 0 is beyond the radiation-pressure limit: a failed model, no exception, no structure passed off."""
    model = solve_structure(7000.0, 0.0, composition_for(0.0), load_blanketing(0.0), max_iterations=60)
    assert model.status == "failed"
    assert model.reason
