"""The packaged model atoms of iron, and the published levels that are members of theirs."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from importlib import resources
from pathlib import Path

import numpy as np

from specsolve.nlte.atom import ModelAtom, load_atom

#: Sizes of the packaged atoms; the second is the one in use, the others show what the size does.
SIZES = (151, 236, 297)
DEFAULT_SIZE = 236


@dataclass(frozen=True, kw_only=True)
class Members:
    """Published levels of a model atom; arrays of shape (n_members,), ascending in stage and energy.

    Attributes
    ----------
    place : ndarray of int
        Level of the model atom.
    stage : ndarray of int
        0 Fe I, 1 Fe II.
    energy_cm : ndarray
        Above the ground level of the stage [cm-1].
    weight : ndarray
    """

    place: np.ndarray
    stage: np.ndarray
    energy_cm: np.ndarray
    weight: np.ndarray


def atom_path(size: int = DEFAULT_SIZE) -> Path:
    """File of a packaged atom."""
    if size not in SIZES:
        raise ValueError(f"there is no packaged atom of {size} levels; there are {', '.join(map(str, SIZES))}")
    return Path(str(resources.files("specsolve") / "data" / "nlte" / f"iron_{size}.npz"))


@cache
def packaged_atom(size: int = DEFAULT_SIZE) -> ModelAtom:
    """A packaged model atom of iron.

    Examples
    --------
    >>> atom = packaged_atom()
    >>> atom.n_levels, [int((atom.stage == s).sum()) for s in range(3)]
    (236, [204, 31, 1])
    """
    return load_atom(atom_path(size))


@cache
def packaged_members(size: int = DEFAULT_SIZE) -> Members:
    """The members of a packaged atom's levels."""
    with np.load(atom_path(size), allow_pickle=False) as data:
        place, stage, energy, weight = data["members_of_levels"]
    return Members(place=place.astype(int), stage=stage.astype(int), energy_cm=energy, weight=weight)
