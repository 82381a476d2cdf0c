"""The packaged tables of Fe I and Fe II levels and transitions, 3500 to 10 000 Angstrom (air)."""

from __future__ import annotations

from functools import cache
from importlib import resources

import numpy as np

LEVEL_DTYPE = np.dtype(
    [("stage", "u1"), ("energy", "<f8"), ("weight", "<u2"), ("term", "<U8"), ("configuration", "<U24")]
)
TRANSITION_DTYPE = np.dtype(
    [
        ("stage", "u1"),
        ("wavelength_air", "<f8"),
        ("lower", "<u2"),
        ("upper", "<u2"),
        ("log_gf", "<f4"),
        ("broadening_sigma", "<f4"),
        ("broadening_alpha", "<f4"),
        ("log_gamma_rad", "<f4"),
    ]
)
ION_STAGE = {"Fe I": 1, "Fe II": 2}


@cache
def load_levels() -> np.ndarray:
    """Levels of Fe I and Fe II: stage, energy [cm-1], statistical weight, term, configuration.

    Returns
    -------
    ndarray of LEVEL_DTYPE, shape (n_levels,)
        Sorted by stage and energy. Source: Atomic Line List v3.00b4 (van Hoof 2018, Galaxies 6, 63).

    Examples
    --------
    >>> str(load_levels()["term"][0])
    'a 5D'
    """
    return _load("iron_levels.npy")


@cache
def load_transitions() -> np.ndarray:
    """E1 transitions of Fe I and Fe II, sorted by stage and air wavelength [Angstrom].

    Returns
    -------
    ndarray of TRANSITION_DTYPE, shape (n_transitions,)
        `lower` and `upper` index `load_levels`; `log_gf` serves identification only; sigma [a0^2] and alpha of
        broadening by hydrogen are nan where unknown; `log_gamma_rad` [rad/s]. Sources: `transitions_build`.

    Examples
    --------
    >>> load_transitions().size > 40000
    True
    """
    return _load("iron_transitions.npy")


def _load(name: str) -> np.ndarray:
    with resources.as_file(resources.files("specsolve") / "data" / "lines" / name) as path:
        table = np.load(path, allow_pickle=False)
    table.flags.writeable = False
    return table
