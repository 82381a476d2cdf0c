"""Populations in local thermodynamic equilibrium (Boltzmann, Saha)."""

from __future__ import annotations

import numpy as np

from specsolve.constants import BOLTZMANN_EV_K, SAHA_CONSTANT
from specsolve.nlte.atom import ModelAtom


def lte_populations(
    atom: ModelAtom, temperature: np.ndarray, electron_density: np.ndarray, total: np.ndarray
) -> np.ndarray:
    """Level populations that obey Boltzmann and Saha.

    Parameters
    ----------
    atom : ModelAtom
    temperature, electron_density, total : ndarray, shape (n,)
        [K], [cm^-3], all particles of the element [cm^-3].

    Returns
    -------
    ndarray, shape (n_levels, n)
        [cm^-3]; n_i proportional to g_i exp(-E_i/kT) (2 (2 pi m k T / h^2)^(3/2) / n_e)^stage, sum = `total`.

    Examples
    --------
    >>> from specsolve.nlte.atom import two_level_atom
    >>> n = lte_populations(two_level_atom(), np.array([5000.0]), np.array([1e12]), np.array([1.0]))
    >>> bool(abs(n.sum() - 1.0) < 1e-14)
    True
    """
    free = np.log(2.0 * SAHA_CONSTANT) + 1.5 * np.log(temperature) - np.log(electron_density)
    log_n = (
        np.log(atom.weight)[:, None]
        - atom.energy_ev[:, None] / (BOLTZMANN_EV_K * temperature)
        + atom.stage[:, None] * free
    )
    log_n -= log_n.max(axis=0)
    n = np.exp(log_n)
    return n * (total / n.sum(axis=0))
