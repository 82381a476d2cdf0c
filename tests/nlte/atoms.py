"""Invented atoms for tests: an iron-like one of nine levels in three stages."""

import numpy as np

from specsolve.constants import HC_EV_CM, RYDBERG_EV
from specsolve.nlte.atom import ALLOWED, ModelAtom

FIRST_EV, SECOND_EV = 7.9, 16.2  # ionization energies of the invented atom


def small_atom() -> ModelAtom:
    """Six levels of stage 0, two of stage 1, one of stage 2; seven lines, eight continua, two hydrogen rates."""
    energy = np.array([0.0, 0.9, 2.5, 3.3, 4.5, 7.6, FIRST_EV, FIRST_EV + 4.7, FIRST_EV + SECOND_EV])
    stage = np.array([0, 0, 0, 0, 0, 0, 1, 1, 2])
    limit = np.where(stage == 0, FIRST_EV, np.where(stage == 1, FIRST_EV + SECOND_EV, np.inf))
    low = np.array([0, 0, 1, 1, 2, 3, 6])
    up = np.array([2, 3, 3, 4, 5, 5, 7])
    level = np.arange(8)
    target = np.where(stage[:8] == 0, 6, 8)
    threshold = energy[target] - energy[:8]
    n_star = (stage[:8] + 1) * np.sqrt(RYDBERG_EV / threshold)
    return ModelAtom(
        energy_ev=energy,
        weight=np.array([25.0, 35.0, 15.0, 21.0, 35.0, 200.0, 30.0, 56.0, 25.0]),
        stage=stage,
        parity=np.array([0, 0, 1, 1, 1, 0, 0, 1, 0]),
        members=np.ones(9, dtype=int),
        name=np.array([f"level {i}" for i in range(9)]),
        limit_ev=limit,
        line_lower=low,
        line_upper=up,
        line_wavelength_cm=HC_EV_CM / (energy[up] - energy[low]),
        line_f=np.array([1e-3, 0.05, 0.08, 0.2, 0.1, 0.1, 0.2]),
        line_n_effective=np.array([3.0, 5.0, 5.0, 8.0, 10.0, 10.0, 5.0]),
        line_gamma_rad=np.full(7, 1e8),
        line_kind=np.full(7, ALLOWED),
        continuum_level=level,
        continuum_target=target,
        continuum_edge_cm=HC_EV_CM / threshold,
        continuum_sigma=7.91e-18 * n_star / (stage[:8] + 1.0) ** 2,
        continuum_n_star=n_star,
        hydrogen_temperature=np.array([2000.0, 10000.0]),
        hydrogen_upper=np.array([1, 4]),
        hydrogen_lower=np.array([0, 3]),
        hydrogen_log_rate=np.array([[-12.0, -11.5], [-10.0, -9.5]]),
        exchange_level=np.array([4]),
        exchange_ion=np.array([6]),
        exchange_log_rate=np.array([[-8.5, -8.4]]),
        source="invented",
    )
