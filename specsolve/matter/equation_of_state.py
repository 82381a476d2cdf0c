"""Equation of state: ionization and hydrogen molecules in local thermodynamic equilibrium.

Atoms and two ionizations of eighteen elements (Saha 1920), H-, H2 and H2+. At a given electron density the density of
neutral hydrogen is the root of a quadratic; what remains is one equation, that of charge, in ln n_e, solved by Newton's
method with the analytic derivative. Ideal gas: no lowering of ionization energies, no pressure ionization, and no
molecules but those of hydrogen. Gas pressure is without radiation pressure.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cache

import numpy as np

from specsolve.constants import BOLTZMANN_ERG_K, BOLTZMANN_EV_K, ELECTRON_MASS_G, PROTON_MASS_G, SAHA_CONSTANT
from specsolve.matter.composition import ELEMENTS, Composition
from specsolve.matter.partition import STAGES, ionization_energy, log_partition, partition_table, species_row

LOWEST_TEMPERATURE, HIGHEST_TEMPERATURE = 2000.0, 30000.0  # K; validity of the equation of state
ELECTRON_AFFINITY_EV = 0.754195  # eV, of hydrogen: Lykke, Murray & Lineberger 1991, Phys. Rev. A 43, 6104
H2_DISSOCIATION_EV = 4.478007  # eV: Barklem & Collet 2016, table 1
H2_PLUS_DISSOCIATION_EV = 2.650639  # eV: Barklem & Collet 2016, table 1
CONVERGED = 1e-13  # |d ln n_e| of the last step
MOST_STEPS = 80


@dataclass(frozen=True, kw_only=True)
class Gas:
    """State of the gas at n points, all number densities in cm^-3.

    Attributes
    ----------
    temperature : ndarray, shape (n,)
        [K]
    gas_pressure : ndarray, shape (n,)
        [dyn cm^-2]
    electron_density, hydrogen_density : ndarray, shape (n,)
        Electrons; all hydrogen nuclei.
    density : ndarray, shape (n,)
        [g cm^-3]
    h1, protons, h_minus, h2, h2_plus, helium : ndarray, shape (n,)
        H I, H II, H-, H2, H2+, He I.
    ions : ndarray, shape (n_elements, 3, n)
        Stages I to III of each element of `ELEMENTS`.
    composition : Composition
    """

    temperature: np.ndarray
    gas_pressure: np.ndarray
    electron_density: np.ndarray
    hydrogen_density: np.ndarray
    density: np.ndarray
    h1: np.ndarray
    protons: np.ndarray
    h_minus: np.ndarray
    h2: np.ndarray
    h2_plus: np.ndarray
    helium: np.ndarray
    ions: np.ndarray
    composition: Composition


@cache
def _heavy_rows() -> tuple[np.ndarray, np.ndarray]:
    """Rows (n_heavy * 3,) in the partition table and ionization energies (2, n_heavy, 1) [eV] of all but hydrogen."""
    names = [[f"{symbol} {stage}" for stage in STAGES] for symbol in ELEMENTS[1:]]
    rows = np.array([species_row(name) for triple in names for name in triple])
    energies = np.array([[ionization_energy(triple[i]) for triple in names] for i in (0, 1)])
    return rows, energies[:, :, None]


@cache
def _molecule_rows() -> np.ndarray:
    return np.array([species_row(name) for name in ("H I", "H2", "H2+")])


def _hydrogen_constants(temperature: np.ndarray) -> tuple[np.ndarray, ...]:
    """Logarithms of the mass action constants of hydrogen.

    Returns
    -------
    ionized : ln of n(H II) n_e / n(H I) [cm^-3]
    negative : ln of n(H-) / (n(H I) n_e) [cm^3]
    molecular : ln of n(H2) / n(H I)^2 [cm^3]
    molecular_ion : ln of n(H2+) / (n(H I) n(H II)) [cm^3]
    """
    kt_ev = BOLTZMANN_EV_K * temperature
    electron = np.log(SAHA_CONSTANT) + 1.5 * np.log(temperature)  # ln (2 pi m_e k T / h^2)^(3/2)
    # The same with the reduced mass of two hydrogen atoms. All partition functions are without nuclear spin.
    pair = electron + 1.5 * np.log(0.5 * (PROTON_MASS_G / ELECTRON_MASS_G + 1.0))
    ln_h1, ln_h2, ln_h2_plus = log_partition(_molecule_rows(), temperature)
    ionized = np.log(2.0) + electron - ln_h1 - ionization_energy("H I") / kt_ev
    negative = ELECTRON_AFFINITY_EV / kt_ev - np.log(2.0) - ln_h1 - electron
    molecular = ln_h2 - 2.0 * ln_h1 + H2_DISSOCIATION_EV / kt_ev - pair
    molecular_ion = ln_h2_plus - ln_h1 + H2_PLUS_DISSOCIATION_EV / kt_ev - pair
    return ionized, negative, molecular, molecular_ion


def equilibrium(temperature: np.ndarray, gas_pressure: np.ndarray, composition: Composition) -> Gas:
    """State of a gas of given temperature and pressure.

    Parameters
    ----------
    temperature : ndarray, shape (n,)
        [K], 2000 to 30 000.
    gas_pressure : ndarray, shape (n,)
        [dyn cm^-2], positive.
    composition : Composition

    Returns
    -------
    Gas
        The electron density is converged to 1e-12 relative, so that differences of ln T as small as 2e-5 are clean.

    Raises
    ------
    ValueError
        Temperature outside its validity, or a pressure that is not positive.

    Examples
    --------
    >>> from specsolve.matter.composition import composition_for
    >>> gas = equilibrium(np.array([5772.0]), np.array([1e5]), composition_for(0.0))
    >>> bool(gas.electron_density[0] < 1e-3 * gas.hydrogen_density[0])
    True
    """
    temperature = np.atleast_1d(np.asarray(temperature, dtype=float))
    gas_pressure = np.atleast_1d(np.asarray(gas_pressure, dtype=float))
    if not np.all((temperature >= LOWEST_TEMPERATURE) & (temperature <= HIGHEST_TEMPERATURE)):
        raise ValueError(
            f"temperature {temperature.min():.1f} to {temperature.max():.1f} K is outside the validity of the equation "
            f"of state ({LOWEST_TEMPERATURE:.0f} to {HIGHEST_TEMPERATURE:.0f} K)"
        )
    if not np.all(gas_pressure > 0.0):
        raise ValueError(f"gas pressure must be positive, but the least is {gas_pressure.min():.3g} dyn/cm2")
    temperature, gas_pressure = np.broadcast_arrays(temperature, gas_pressure)
    particles = gas_pressure / (BOLTZMANN_ERG_K * temperature)
    state = _State(temperature, particles, composition)

    high = np.log(particles) - 1e-12  # electrons are fewer than all particles
    low = np.full_like(high, -np.inf)
    log_ne = np.log(particles) - 0.5 * np.log1p(np.exp(np.minimum(-state.hydrogen[0] + np.log(particles), 600.0)))
    log_ne = np.minimum(np.logaddexp(log_ne, np.log(particles) - 10.0), high - 0.5)
    for _ in range(MOST_STEPS):
        excess, slope = state.charge(log_ne)
        low = np.where(excess > 0.0, np.maximum(low, log_ne), low)
        high = np.where(excess < 0.0, np.minimum(high, log_ne), high)
        step = np.clip(-excess / slope, -6.0, 6.0)
        trial = log_ne + step
        outside = (trial <= low) | (trial >= high)
        halved = np.where(np.isfinite(low), 0.5 * (low + high), high - 3.0)
        new = np.where(outside & (np.abs(step) > CONVERGED), halved, trial)
        change = np.max(np.abs(new - log_ne))
        log_ne = new
        if change < CONVERGED:
            break
    return state.gas(log_ne, gas_pressure)


class _State:
    """What does not depend on the electron density, and the densities at a given one."""

    def __init__(self, temperature: np.ndarray, particles: np.ndarray, composition: Composition):
        self.temperature, self.particles, self.composition = temperature, particles, composition
        self.hydrogen = _hydrogen_constants(temperature)
        rows, energies = _heavy_rows()
        ln_u = log_partition(rows, temperature).reshape(-1, 3, temperature.size)
        common = np.log(2.0 * SAHA_CONSTANT) + 1.5 * np.log(temperature)
        inverse_kt = 1.0 / (BOLTZMANN_EV_K * temperature)
        self.first = common + ln_u[:, 1] - ln_u[:, 0] - energies[0] * inverse_kt  # ln of n(II) n_e / n(I)
        self.second = common + ln_u[:, 2] - ln_u[:, 1] - energies[1] * inverse_kt
        self.heavy = composition.abundances[1:]

    def stages(self, log_ne: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Fractions of stages I, II, III of all elements but hydrogen, each (n_elements - 1, n)."""
        one = self.first - log_ne
        two = one + self.second - log_ne
        largest = np.maximum(np.maximum(one, two), 0.0)
        zero, one, two = np.exp(-largest), np.exp(one - largest), np.exp(two - largest)
        total = zero + one + two
        return zero / total, one / total, two / total

    def neutral_hydrogen(self, log_ne: np.ndarray) -> tuple[np.ndarray, ...]:
        """n(H I), its d ln / d ln n_e, and per H I: protons, H-; per H I squared: H2, H2+."""
        ionized, negative, molecular, molecular_ion = self.hydrogen
        protons, minus = np.exp(ionized - log_ne), np.exp(negative + log_ne)
        h2, h2_plus = np.exp(molecular), np.exp(molecular_ion + ionized - log_ne)
        others = self.heavy.sum()
        # a n^2 + b n = particles - electrons, with heavy nuclei counted through hydrogen nuclei
        a = (h2 + h2_plus) * (1.0 + 2.0 * others)
        b = (1.0 + protons + minus) * (1.0 + others)
        electrons = np.exp(log_ne)
        c = self.particles - electrons
        root = np.sqrt(b * b + 4.0 * a * c)
        n = 2.0 * c / (b + root)
        da = -h2_plus * (1.0 + 2.0 * others)
        db = (minus - protons) * (1.0 + others)
        slope = -(electrons + da * n * n + db * n) / (2.0 * a * n + b) / n
        return n, slope, protons, minus, h2, h2_plus

    def charge(self, log_ne: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """ln(positive charges) - ln(electrons and H-), and its derivative with respect to ln n_e."""
        n, slope, protons, minus, h2, h2_plus = self.neutral_hydrogen(log_ne)
        _, one, two = self.stages(log_ne)
        mean = one + 2.0 * two
        heavy = self.heavy @ mean
        d_heavy = -(self.heavy @ (one + 4.0 * two - mean * mean))
        nuclei = 1.0 + protons + minus + 2.0 * n * (h2 + h2_plus)  # per H I
        d_nuclei = minus - protons + 2.0 * n * (slope * (h2 + h2_plus) - h2_plus)
        positive = protons + n * h2_plus + heavy * nuclei
        d_positive = -protons + n * h2_plus * (slope - 1.0) + d_heavy * nuclei + heavy * d_nuclei
        electrons = np.exp(log_ne)
        negative = electrons + n * minus
        d_negative = electrons + n * minus * (1.0 + slope)
        excess = np.log(n * positive) - np.log(negative)
        return excess, slope + d_positive / positive - d_negative / negative

    def gas(self, log_ne: np.ndarray, gas_pressure: np.ndarray) -> Gas:
        n, _, protons, minus, h2, h2_plus = self.neutral_hydrogen(log_ne)
        hydrogen = n * (1.0 + protons + minus + 2.0 * n * (h2 + h2_plus))
        ions = np.empty((len(ELEMENTS), 3, n.size))
        ions[0, 0], ions[0, 1], ions[0, 2] = n, n * protons, 0.0
        amounts = self.heavy[:, None] * hydrogen
        for i, fraction in enumerate(self.stages(log_ne)):
            ions[1:, i] = amounts * fraction
        return Gas(
            temperature=self.temperature,
            gas_pressure=gas_pressure,
            electron_density=np.exp(log_ne),
            hydrogen_density=hydrogen,
            density=hydrogen * self.composition.mass_per_hydrogen,
            h1=n,
            protons=ions[0, 1],
            h_minus=n * minus,
            h2=n * n * h2,
            h2_plus=n * n * h2_plus,
            helium=ions[1, 0],
            ions=ions,
            composition=self.composition,
        )


def gas_with_electrons(
    temperature: np.ndarray, gas_pressure: np.ndarray, electron_density: np.ndarray, composition: Composition
) -> Gas:
    """State of a gas whose electron density comes from elsewhere, as in an imported structure.

    Parameters
    ----------
    temperature, gas_pressure : ndarray, shape (n,)
        As in `equilibrium`.
    electron_density : ndarray, shape (n,)
        [cm^-3]; kept as given, also where it is not that of charge conservation.
    composition : Composition

    Returns
    -------
    Gas
    """
    electron_density = np.asarray(electron_density, dtype=float)
    particles = np.asarray(gas_pressure, dtype=float) / (BOLTZMANN_ERG_K * np.asarray(temperature, dtype=float))
    if not np.all((electron_density > 0.0) & (electron_density < particles)):
        raise ValueError("electron densities must be positive and below the density of all particles")
    gas = _State(np.asarray(temperature, dtype=float), particles, composition).gas(
        np.log(electron_density), np.asarray(gas_pressure, dtype=float)
    )
    return replace(gas, electron_density=electron_density)


def ion_density(gas: Gas, ion: str, number_abundance: float) -> np.ndarray:
    """Density of an ion of any element, also one that the equation of state does not contain.

    Parameters
    ----------
    gas : Gas
    ion : str
        As "Y II", stages I to III.
    number_abundance : float
        Nuclei of the element per hydrogen nucleus.

    Returns
    -------
    ndarray, shape (n,)
        [cm^-3]; Saha equation with the electron density of the gas.

    Examples
    --------
    >>> from specsolve.matter.composition import composition_for
    >>> gas = equilibrium(np.array([5772.0]), np.array([1e5]), composition_for(0.0))
    >>> iron = [ion_density(gas, f"Fe {stage}", 10**-4.54)[0] for stage in STAGES]
    >>> bool(abs(sum(iron) / gas.hydrogen_density[0] / 10**-4.54 - 1) < 1e-12)
    True
    """
    symbol, numeral = ion.split()
    if numeral not in STAGES:
        raise KeyError(f"{ion!r}: stages I to III only")
    names = [f"{symbol} {stage}" for stage in STAGES if f"{symbol} {stage}" in partition_table().rows]
    rows = np.array([species_row(name) for name in names])
    index = rows.tolist().index(species_row(ion))
    ln_u = log_partition(rows, gas.temperature)
    common = np.log(2.0 * SAHA_CONSTANT) + 1.5 * np.log(gas.temperature) - np.log(gas.electron_density)
    logs = [np.zeros_like(gas.temperature)]
    for i in range(len(rows) - 1):
        energy = partition_table().ionization_energy[rows[i]]
        logs.append(logs[-1] + common + ln_u[i + 1] - ln_u[i] - energy / (BOLTZMANN_EV_K * gas.temperature))
    logs = np.array(logs)
    weights = np.exp(logs - logs.max(axis=0))
    return number_abundance * gas.hydrogen_density * weights[index] / weights.sum(axis=0)
