"""Model structures made for tests: a scaled solar T(tau) in hydrostatic equilibrium."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from specsolve.matter.composition import Composition
from specsolve.matter.continuum import continuum_opacity
from specsolve.matter.equation_of_state import equilibrium


@dataclass(frozen=True)
class TestStructure:
    __test__ = False
    column_mass: np.ndarray
    temperature: np.ndarray
    gas_pressure: np.ndarray
    electron_density: np.ndarray


def scaled_solar(teff: float, logg: float, composition: Composition, n: int = 81) -> TestStructure:
    """T^4 = 3/4 Teff^4 (tau + q), q a fit to the solar structure of Vernazza, Avrett & Loeser 1981 (from memory)."""
    tau = np.logspace(-6.5, 2.0, n)
    q = 1.0361 - 0.3134 * np.exp(-2.44799995 * tau) - 0.29589999 * np.exp(-30.0 * tau)
    temperature = teff * (0.75 * (tau + q)) ** 0.25
    temperature = np.minimum(temperature, 11000.0)
    gravity, wave = 10.0**logg, np.array([5e-5])

    def opacity(i, pressure):
        gas = equilibrium(temperature[i : i + 1], np.array([pressure]), composition)
        return sum(continuum_opacity(wave, gas))[0, 0], gas.electron_density[0]

    pressure, electrons = np.empty(n), np.empty(n)
    start = 1e-2
    for _ in range(60):
        start = 0.5 * (start + gravity * tau[0] / opacity(0, start)[0] * 0.5)
    pressure[0] = start
    step = np.log(tau[1] / tau[0])
    for i in range(n - 1):  # Heun's method in ln tau
        first = gravity * tau[i] / opacity(i, pressure[i])[0]
        guess = pressure[i] + step * first
        for _ in range(4):
            guess = pressure[i] + 0.5 * step * (first + gravity * tau[i + 1] / opacity(i + 1, guess)[0])
        pressure[i + 1] = guess
    for i in range(n):
        electrons[i] = opacity(i, pressure[i])[1]
    return TestStructure(pressure / gravity, temperature, pressure, electrons)
