"""Bound-free absorption of hydrogen and of neutral atoms, level by level.

Each level contributes population x cross-section; both are matrices, (n_levels, n) and (n_w, n_levels), so that all
levels of all atoms cost one matrix product.
"""

from __future__ import annotations

from functools import cache, lru_cache
from pathlib import Path
from typing import NamedTuple

import numpy as np

from specsolve.constants import BOLTZMANN_EV_K, HC_EV_CM, RYDBERG_EV
from specsolve.matter.composition import ELEMENTS
from specsolve.matter.equation_of_state import Gas
from specsolve.matter.partition import ionization_energy, log_partition, species_row

TABLE_PATH = Path(__file__).parent.parent / "data" / "matter" / "continuum.npz"
KRAMERS_CM2 = 7.907e-18  # threshold cross-section of hydrogen n = 1 without Gaunt factor; Kramers 1923
HYDROGEN_LEVELS = 60  # beyond, the sum of n^-3 is < 0.5 % of what remains at 2.5 um


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
    """

    rows: np.ndarray
    elements: np.ndarray
    ion: np.ndarray
    weight: np.ndarray
    energy: np.ndarray
    binding: np.ndarray


@cache
def absorbing_levels() -> Levels:
    """Hydrogen first (n = 1, 2, ...), then the levels of the packaged table."""
    with np.load(TABLE_PATH, allow_pickle=False) as data:
        names, weight = data["level_ion"].astype(str), data["level_weight"]
        energy, binding = data["level_energy_ev"], data["level_binding_ev"]
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
    )


def hydrogen_gaunt_factor(n: np.ndarray, excess: np.ndarray) -> np.ndarray:
    """Bound-free Gaunt factor of hydrogen.

    Parameters
    ----------
    n : ndarray
        Principal quantum number.
    excess : ndarray
        Energy of the free electron in units of the binding energy of the level.

    Returns
    -------
    ndarray
        Asymptotic expansion of Menzel & Pekeris (1935, MNRAS 96, 77), two terms.
    """
    root = (n * (excess + 1.0)) ** (2.0 / 3.0)
    return 1.0 + 0.1728 * (excess - 1.0) / root - 0.0496 * (excess**2 + 4.0 / 3.0 * excess + 1.0) / root**2


def cross_sections(wavelength_cm: np.ndarray) -> np.ndarray:
    """Cross-sections of all levels.

    Parameters
    ----------
    wavelength_cm : ndarray, shape (n_w,)
        In vacuum [cm].

    Returns
    -------
    ndarray, shape (n_w, n_levels)
        [cm^2]; zero beyond the threshold. Hydrogen with Gaunt factors; other atoms hydrogenic with the effective
        quantum number of the level.
    """
    return _cross_sections(np.ascontiguousarray(wavelength_cm, dtype=float).tobytes())


@lru_cache(maxsize=64)
def _cross_sections(wavelength_bytes: bytes) -> np.ndarray:
    wavelength_cm = np.frombuffer(wavelength_bytes)
    levels = absorbing_levels()
    ratio = HC_EV_CM / wavelength_cm[:, None] / levels.binding  # photon energy over threshold
    effective_n = np.sqrt(RYDBERG_EV / levels.binding)
    sigma = KRAMERS_CM2 * effective_n / ratio**3
    n = np.arange(1, HYDROGEN_LEVELS + 1)
    sigma[:, :HYDROGEN_LEVELS] *= hydrogen_gaunt_factor(n, np.maximum(ratio[:, :HYDROGEN_LEVELS] - 1.0, 0.0))
    sigma[ratio < 1.0] = 0.0
    sigma.flags.writeable = False
    return sigma


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
