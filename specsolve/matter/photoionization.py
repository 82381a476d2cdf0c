"""Bound-free absorption of hydrogen and of neutral atoms, level by level.

Each level contributes population x cross-section; both are matrices, (n_levels, n) and (n_w, n_levels), so that all
levels of all atoms cost one matrix product.
"""

from __future__ import annotations

from functools import cache, lru_cache
from pathlib import Path
from typing import NamedTuple

import numpy as np

from specsolve.constants import BOLTZMANN_EV_K, HC_EV_CM
from specsolve.matter.composition import ELEMENTS
from specsolve.matter.equation_of_state import Gas
from specsolve.matter.hydrogen import KRAMERS_CM2, gaunt_factor
from specsolve.matter.partition import ionization_energy, log_partition, species_row

TABLE_PATH = Path(__file__).parent.parent / "data" / "matter" / "continuum.npz"
HYDROGEN_LEVELS = 60  # beyond, the sum of n^-3 is < 0.5 % of what remains at 2.5 um
MOST_CACHED = 256  # wavelengths of one call whose cross-sections are kept for the next


class Levels(NamedTuple):
    """Absorbing levels.

    Attributes
    ----------
    rows : ndarray of int, shape (n_ions,)
        Rows of the ions in the partition table.
    elements : ndarray of int, shape (n_ions,)
        Their elements, as positions in `ELEMENTS`.
    ion : ndarray of int, shape (n_levels,)
        Position of the ion of each level in `rows`.
    weight, energy, binding : ndarray, shape (n_levels,)
        Statistical weight; excitation and binding energy [eV].
    threshold, slope : ndarray, shape (n_levels,)
        Cross-section at the threshold [cm^2] and power of wavelength with which it falls; of hydrogen without Gaunt
        factor.
    fitted : ndarray of int, shape (n_fitted,)
        Levels whose cross-section is a fit instead.
    fit : ndarray, shape (n_fitted, 7)
        Its parameters, see `fitted_cross_section`.
    """

    rows: np.ndarray
    elements: np.ndarray
    ion: np.ndarray
    weight: np.ndarray
    energy: np.ndarray
    binding: np.ndarray
    threshold: np.ndarray
    slope: np.ndarray
    fitted: np.ndarray
    fit: np.ndarray


@cache
def absorbing_levels() -> Levels:
    """Hydrogen first (n = 1, 2, ...), then the levels of the packaged table."""
    with np.load(TABLE_PATH) as data:
        names, weight = data["level_ion"].astype(str), data["level_weight"]
        energy, binding = data["level_energy_ev"], data["level_binding_ev"]
        threshold, slope = data["level_threshold_cm2"], data["level_slope"]
        fitted, fit = data["ground_level"], data["ground_fit"]
    ions = ["H I", *dict.fromkeys(names.tolist())]
    n = np.arange(1, HYDROGEN_LEVELS + 1)
    bound = ionization_energy("H I") / n**2
    return Levels(
        rows=np.array([species_row(ion) for ion in ions]),
        elements=np.array([ELEMENTS.index(ion.split()[0]) for ion in ions]),
        ion=np.concatenate([np.zeros(len(n), dtype=int), [ions.index(name) for name in names]]),
        weight=np.concatenate([2.0 * n**2, weight]),
        energy=np.concatenate([ionization_energy("H I") - bound, energy]),
        binding=np.concatenate([bound, binding]),
        threshold=np.concatenate([KRAMERS_CM2 * n, threshold]),
        slope=np.concatenate([np.full(len(n), 3.0), slope]),
        fitted=fitted + len(n),
        fit=fit,
    )


def cross_sections(wavelength_cm: np.ndarray) -> np.ndarray:
    """Cross-sections of all levels.

    Parameters
    ----------
    wavelength_cm : ndarray, shape (n_w,)
        In vacuum [cm].

    Returns
    -------
    ndarray, shape (n_w, n_levels)
        [cm^2]; zero beyond the threshold. Hydrogen exact; ground terms of Na, Mg, Al, Si, Ca, Fe as fitted by Verner et
        al. (1996); a few low terms with published edges; all others hydrogenic with the effective quantum number.
    """
    wavelength_cm = np.ascontiguousarray(wavelength_cm, dtype=float)
    if wavelength_cm.size > MOST_CACHED:
        return _cross_sections(wavelength_cm)
    return _cached_cross_sections(wavelength_cm.tobytes())


@lru_cache(maxsize=32)
def _cached_cross_sections(wavelength_bytes: bytes) -> np.ndarray:
    sigma = _cross_sections(np.frombuffer(wavelength_bytes))
    sigma.flags.writeable = False
    return sigma


def _cross_sections(wavelength_cm: np.ndarray) -> np.ndarray:
    levels = absorbing_levels()
    photon = HC_EV_CM / wavelength_cm
    ratio = photon[:, None] / levels.binding  # photon energy over threshold
    sigma = levels.threshold * ratio**-levels.slope
    for n in range(1, HYDROGEN_LEVELS + 1):
        sigma[:, n - 1] *= gaunt_factor(n, np.maximum(ratio[:, n - 1] - 1.0, 0.0))
    sigma[:, levels.fitted] = fitted_cross_section(photon[:, None] + levels.energy[levels.fitted], levels.fit)
    sigma[ratio < 1.0] = 0.0
    return sigma


def fitted_cross_section(energy: np.ndarray, fit: np.ndarray) -> np.ndarray:
    """Photoionization cross-section of a ground state.

    Parameters
    ----------
    energy : ndarray, shape (..., n_levels)
        Of the photon above the ground state [eV], above the threshold.
    fit : ndarray, shape (n_levels, 7)
        E0 [eV], sigma0 [1e-18 cm^2], ya, P, yw, y0, y1.

    Returns
    -------
    ndarray, shape (..., n_levels)
        [cm^2]; Verner et al. 1996, ApJ 465, 487, eq. 1.
    """
    e0, sigma0, ya, p, yw, y0, y1 = fit.T
    x = energy / e0 - y0
    y = np.sqrt(x**2 + y1**2)
    return 1e-18 * sigma0 * ((x - 1.0) ** 2 + yw**2) * y ** (0.5 * p - 5.5) * (1.0 + np.sqrt(y / ya)) ** -p


def bound_free(wavelength_cm: np.ndarray, gas: Gas) -> np.ndarray:
    """Bound-free absorption, without the correction for stimulated emission.

    Parameters
    ----------
    wavelength_cm : ndarray, shape (n_w,)
        In vacuum [cm].
    gas : Gas

    Returns
    -------
    ndarray, shape (n_w, n)
        [cm^-1]
    """
    levels = absorbing_levels()
    per_state = gas.ions[levels.elements, 0] * np.exp(-log_partition(levels.rows, gas.temperature))
    boltzmann = np.exp(levels.energy[:, None] * (-1.0 / (BOLTZMANN_EV_K * gas.temperature)))
    return cross_sections(wavelength_cm) @ (levels.weight[:, None] * boltzmann * per_state[levels.ion])
