"""Sampling of the line opacity on wavelengths, and its order statistics in each band.

The line opacity per gram of one line is, with local thermodynamic equilibrium,

    kappa(lambda) = (pi e^2 / m c) gf (n_ion / U rho) exp(-E/kT) (1 - exp(-hc / lambda kT))
                    * lambda_0 H(a, v) / (sqrt(pi) v_D),

v_D the Doppler velocity of thermal motion and microturbulence, v = c (lambda - lambda_0) / (lambda_0 v_D),
a = gamma lambda_0 / (4 pi v_D) (Gray, The Observation and Analysis of Stellar Photospheres, 3rd ed., chapter 11).
gamma adds radiative, hydrogen (and helium) and electron broadening. `sample_reference` is the plain NumPy
statement of it; `sample` is the compiled one, which follows each line only as far as it matters.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numba import njit
from scipy.special import voigt_profile

from specsolve.atmosphere.blanketing_lines import BlanketingLines
from specsolve.constants import (
    ATOMIC_MASS_G,
    BOLTZMANN_ERG_K,
    BOLTZMANN_EV_K,
    ELECTRON_CHARGE_ESU,
    ELECTRON_MASS_G,
    HC_EV_CM,
    LIGHT_SPEED_CM_S,
    PROTON_MASS_G,
    RYDBERG_EV,
)
from specsolve.matter.partition import ionization_energy

#: pi e^2 / m c [cm^2 Hz].
OSCILLATOR_CM2_HZ = np.pi * ELECTRON_CHARGE_ESU**2 / (ELECTRON_MASS_G * LIGHT_SPEED_CM_S)
#: gamma_6 = 17 C6^(2/5) v^(3/5) N (Unsoeld 1955, Physik der Sternatmosphaeren, sec. 83; numbers from memory).
UNSOELD_FACTOR = 17.0
#: C6 = 0.3e-30 Z^2 [1/(I - E_up)^2 - 1/(I - E_low)^2], energies in eV (same source).
UNSOELD_C6 = 0.3e-30
#: Factor on that gamma_6: median over the lines of an ion (Na I, Ca I: their strong lines) of the widths at 10 000 K
#: tabulated by Barklem, Piskunov & O'Mara 2000, A&AS 142, 467, and for Fe II by Barklem &
#: Aspelund-Johansson 2005, A&A 435, 373.
HYDROGEN_FACTORS = {
    "Li I": 2.1, "C I": 2.1, "N I": 1.9, "Na I": 1.7, "Mg I": 2.4, "Mg II": 1.6, "Al I": 2.2, "Si I": 2.2, "P I": 1.6,
    "S I": 2.2, "K I": 2.4, "Ca I": 1.8, "Ca II": 1.5, "Fe I": 1.4, "Fe II": 0.9,
}  # fmt: skip
#: The same for ions that are not in that table, by stage: as iron.
HYDROGEN_FACTORS_OTHERWISE = {"I": HYDROGEN_FACTORS["Fe I"], "II": HYDROGEN_FACTORS["Fe II"]}
#: Broadening by a helium atom against that by a hydrogen atom: (polarizability 1.384/4.5)^(2/5) (reduced mass)^(3/10)
#: gives 0.41 for iron.
HELIUM_RELATIVE = 0.41
#: gamma_4 per electron = 1e-8 n^5 with n the effective quantum number of the upper level: common practice, no source.
STARK_FACTOR = 1e-8
#: Binding energies of the upper level below this [eV] (also levels above the limit) are set to it in the two formulae.
LEAST_BINDING_EV = 0.3

#: A line below this fraction of the continuum in its centre is left out, and a wing is followed down to it.
LEAST_FRACTION = 3e-4

_SQRT_PI = float(np.sqrt(np.pi))
_TABLE_STEP = 0.01
_TABLE_END = 6.0


@dataclass(frozen=True, kw_only=True)
class LineConstants:
    """What a line needs besides the state of the gas, arrays of shape (n_lines,) unless stated.

    Attributes
    ----------
    wavelength_cm : ndarray
        Vacuum wavelength [cm].
    excitation_potential : ndarray
        Lower level [eV].
    gf : ndarray
        Statistical weight times oscillator strength.
    ion_index : ndarray of int
        Place in `ions`.
    gamma_rad : ndarray
        [s^-1].
    hydrogen : ndarray
        gamma_6 per perturber at 1 K; grows as T^0.3 [cm^3 s^-1 K^-0.3].
    stark : ndarray
        gamma_4 per electron [cm^3 s^-1].
    masses : ndarray, shape (n_ions,)
        Atomic mass [g].
    """

    wavelength_cm: np.ndarray
    excitation_potential: np.ndarray
    gf: np.ndarray
    ion_index: np.ndarray
    gamma_rad: np.ndarray
    hydrogen: np.ndarray
    stark: np.ndarray
    masses: np.ndarray


def hydrogen_factor(ion: str) -> float:
    """Factor on Unsoeld's broadening by hydrogen for the lines of an ion."""
    return HYDROGEN_FACTORS.get(ion, HYDROGEN_FACTORS_OTHERWISE[ion.split()[1]])


def line_constants(lines: BlanketingLines, atomic_mass) -> LineConstants:
    """Damping and other constants of each line; `atomic_mass(symbol)` in atomic mass units."""
    charge = np.array([len(ion.split()[1]) for ion in lines.ions], dtype=float)
    limit = np.array([ionization_energy(ion) for ion in lines.ions])
    masses = np.array([atomic_mass(ion.split()[0]) for ion in lines.ions]) * ATOMIC_MASS_G
    factor = np.array([hydrogen_factor(ion) for ion in lines.ions])
    row = lines.ion_index
    upper = lines.excitation_potential + HC_EV_CM / lines.wavelength_cm
    bound_upper = np.maximum(limit[row] - upper, LEAST_BINDING_EV)
    bound_lower = np.maximum(limit[row] - lines.excitation_potential, bound_upper + 1e-3)
    c6 = UNSOELD_C6 * charge[row] ** 2 * (bound_upper**-2 - bound_lower**-2)
    speed = np.sqrt(8.0 * BOLTZMANN_ERG_K / np.pi * (1.0 / masses + 1.0 / PROTON_MASS_G))
    quantum_number = charge[row] * np.sqrt(RYDBERG_EV / bound_upper)
    return LineConstants(
        wavelength_cm=lines.wavelength_cm,
        excitation_potential=lines.excitation_potential,
        gf=10.0**lines.log_gf,
        ion_index=row,
        gamma_rad=10.0**lines.log_gamma_rad,
        hydrogen=factor[row] * UNSOELD_FACTOR * c6**0.4 * speed[row] ** 0.6,
        stark=STARK_FACTOR * quantum_number**5,
        masses=masses,
    )


def _hjerting_table() -> np.ndarray:
    """H1(v), the term linear in a of H(a, v), on a uniform grid: -(2/sqrt(pi)) (1 - 2 v D(v)), D Dawson's integral."""
    from scipy.special import dawsn

    v = np.arange(0.0, _TABLE_END + 2 * _TABLE_STEP, _TABLE_STEP)
    return -2.0 / _SQRT_PI * (1.0 - 2.0 * v * dawsn(v))


HJERTING_TABLE = _hjerting_table()


@njit(cache=True, nogil=True)
def hjerting(a, v, table):
    """Voigt function H(a, v) to about 1e-3 (a < 0.1, series in a) or 1e-4 (else; Humlicek 1982, JQSRT 27, 437)."""
    v = abs(v)
    if a < 0.1:
        square = v * v
        if v < _TABLE_END:
            place = v / _TABLE_STEP
            cell = int(place)
            linear = table[cell] + (place - cell) * (table[cell + 1] - table[cell])
            return np.exp(-square) * (1.0 + a * a * (1.0 - 2.0 * square)) + a * linear
        return a / (_SQRT_PI * square) * (1.0 + (1.5 + 3.75 / square) / square)
    size = v + a
    t = complex(a, -v)
    if size > 15.0:
        return (t * 0.5641896 / (0.5 + t * t)).real
    if size > 5.5:
        u = t * t
        return (t * (1.410474 + u * 0.5641896) / (0.75 + u * (3.0 + u))).real
    if a >= 0.195 * v - 0.176:
        top = 16.4955 + t * (20.20933 + t * (11.96482 + t * (3.778987 + t * 0.5642236)))
        return (top / (16.4955 + t * (38.82363 + t * (39.27121 + t * (21.69274 + t * (6.699398 + t)))))).real
    u = t * t
    top = 36183.31 - u * (3321.9905 - u * (1540.787 - u * (219.0313 - u * (35.76683 - u * (1.320522 - u * 0.56419)))))
    low = 32066.6 - u * (
        24322.84 - u * (9022.228 - u * (2186.181 - u * (364.2191 - u * (61.57037 - u * (1.841439 - u)))))
    )
    return (np.exp(u) - t * top / low).real


@njit(cache=True, nogil=True)
def _sample_kernel(
    opacity, samples, nearest, wavelength, excitation, gf, ion_index, gamma_rad, hydrogen, stark,
    per_ion, doppler, temperature, perturbers, electron_density, least, sample_band, table,
):  # fmt: skip
    n_samples = len(samples)
    beta = 1.0 / (BOLTZMANN_EV_K * temperature)
    growth = perturbers * temperature**0.3
    for line in range(len(wavelength)):
        ion = ion_index[line]
        centre = wavelength[line]
        velocity = doppler[ion]
        strength = per_ion[ion] * gf[line] * np.exp(-beta * excitation[line])
        strength *= (1.0 - np.exp(-beta * HC_EV_CM / centre)) * centre / (_SQRT_PI * velocity)
        start = nearest[line]
        limit = least[sample_band[start]]
        if strength < limit:
            continue
        gamma = gamma_rad[line] + hydrogen[line] * growth + stark[line] * electron_density
        a = gamma * centre / (4.0 * np.pi * velocity)
        scale = LIGHT_SPEED_CM_S / (centre * velocity)
        j = start
        while j < n_samples:
            value = strength * hjerting(a, (samples[j] - centre) * scale, table)
            opacity[j] += value
            if value < least[sample_band[j]]:
                break
            j += 1
        j = start - 1
        while j >= 0:
            value = strength * hjerting(a, (samples[j] - centre) * scale, table)
            opacity[j] += value
            if value < least[sample_band[j]]:
                break
            j -= 1


def sample(lines: LineConstants, samples, sample_band, nearest, state, vmic_kms: float, least) -> np.ndarray:
    """Line opacity of one state of the gas on every sample, compiled.

    Parameters
    ----------
    lines : LineConstants
    samples : ndarray, shape (n_samples,)
        Vacuum wavelengths, ascending [cm].
    sample_band : ndarray of int, shape (n_samples,)
        Band of each sample.
    nearest : ndarray of int, shape (n_lines,)
        Sample at or above each line (the last one for lines beyond).
    state : dict
        `temperature` [K], `per_ion` = n_ion / (U rho) (n_ions,) [g^-1], `perturbers`, `electron_density` [cm^-3].
    vmic_kms : float
        Microturbulence of the opacity [km/s].
    least : ndarray, shape (n_bands,)
        Opacity below which lines and wings are not followed [cm^2 g^-1].

    Returns
    -------
    ndarray, shape (n_samples,)
        [cm^2 g^-1].
    """
    opacity = np.zeros(len(samples))
    _sample_kernel(
        opacity, samples, nearest, lines.wavelength_cm, lines.excitation_potential, lines.gf, lines.ion_index,
        lines.gamma_rad, lines.hydrogen, lines.stark, OSCILLATOR_CM2_HZ * state["per_ion"],
        doppler_velocity(lines.masses, state["temperature"], vmic_kms), state["temperature"], state["perturbers"],
        state["electron_density"], least, sample_band, HJERTING_TABLE,
    )  # fmt: skip
    return opacity


def doppler_velocity(masses, temperature: float, vmic_kms: float) -> np.ndarray:
    """Most probable velocity of thermal motion and microturbulence [cm/s]."""
    return np.sqrt(2.0 * BOLTZMANN_ERG_K * temperature / masses + (vmic_kms * 1e5) ** 2)


def sample_reference(lines: LineConstants, samples, state, vmic_kms: float) -> np.ndarray:
    """The same in plain NumPy with every line followed everywhere: slow, the test oracle."""
    opacity = np.zeros(len(samples))
    temperature = state["temperature"]
    velocities = doppler_velocity(lines.masses, temperature, vmic_kms)
    for i, centre in enumerate(lines.wavelength_cm):
        ion = lines.ion_index[i]
        energy = HC_EV_CM / centre
        gamma = lines.gamma_rad[i] + lines.stark[i] * state["electron_density"]
        gamma += lines.hydrogen[i] * state["perturbers"] * temperature**0.3
        doppler_hz = velocities[ion] / centre
        frequency = LIGHT_SPEED_CM_S * (samples - centre) / centre**2
        profile = voigt_profile(frequency, doppler_hz / np.sqrt(2.0), gamma / (4.0 * np.pi))
        boltzmann = np.exp(-lines.excitation_potential[i] / (BOLTZMANN_EV_K * temperature))
        emission = 1.0 - np.exp(-energy / (BOLTZMANN_EV_K * temperature))
        opacity += OSCILLATOR_CM2_HZ * lines.gf[i] * state["per_ion"][ion] * boltzmann * emission * profile
    return opacity


def order_statistics(opacity: np.ndarray, sub_edges: np.ndarray) -> np.ndarray:
    """Means of the sorted opacities between the edges of the sub-bins.

    Parameters
    ----------
    opacity : ndarray, shape (..., n_samples)
        Opacities on samples of equal weight.
    sub_edges : ndarray, shape (n_sub + 1,)
        Edges in cumulative fraction, 0 to 1; each must fall between two samples.

    Returns
    -------
    ndarray, shape (..., n_sub)
        Weighted with the widths of the sub-bins they give back the mean opacity exactly.
    """
    n_samples = opacity.shape[-1]
    places = np.rint(sub_edges * n_samples).astype(int)
    if np.any(np.abs(places - sub_edges * n_samples) > 1e-6) or np.any(np.diff(places) < 1):
        raise ValueError(f"{n_samples} samples do not divide at the sub-bin edges {sub_edges}.")
    ordered = np.sort(opacity, axis=-1)
    return np.add.reduceat(ordered, places[:-1], axis=-1) / np.diff(places)
