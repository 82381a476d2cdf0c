"""Lines that another grid already has: taken over if a recomputation at a few nodes confirms them."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from typing import Any

import numpy as np

from specsolve.grid.axes import Axis
from specsolve.grid.codes import MISSING
from specsolve.grid.engine import Engine, codes_of_nodes
from specsolve.grid.store import ResponseGrid
from specsolve.lines import LineList

SAME_PHYSICS = (
    "wavelength_air",
    "excitation_potential",
    "log_gf",
    "broadening_sigma",
    "broadening_alpha",
    "log_gamma_rad",
    "log_gamma_stark",
)
"""Properties of a line that must be equal for its widths to be taken over."""

PROBES = 3
"""Nodes at which taken-over lines are computed again."""

TOLERANCE = 2
"""Largest difference in codes (1e-4 dex) of a confirmed width: rounding, and the arithmetic of another processor."""


def same_lines(ours: LineList, theirs: LineList) -> np.ndarray:
    """Position in `theirs` of the line with the same key and numbers as each of ours, -1 where there is none."""
    place = theirs.position_of(ours.key)
    for i in np.flatnonzero(place >= 0):
        for name in SAME_PHYSICS:
            if not np.array_equal(getattr(ours, name)[i], getattr(theirs, name)[place[i]], equal_nan=True):
                place[i] = -1
                break
    return place


def node_positions(
    other: ResponseGrid, node_axes: Sequence[Axis], line_axes: Sequence[Axis]
) -> list[np.ndarray] | None:
    """Index in another grid of every node along every axis of ours; None if it lacks one."""
    if [axis.name for axis in other.node_axes] != [axis.name for axis in node_axes]:
        return None
    positions = []
    for axis, theirs in zip((*node_axes, *line_axes), (*other.node_axes, *other.line_axes), strict=True):
        found = np.array([theirs.index_of(value) for value in axis.values])
        if np.any(found < 0):
            return None
        positions.append(found)
    return positions


def codes_of_other(
    other: ResponseGrid, treatment: str, positions: Sequence[np.ndarray], nodes: np.ndarray, lines: np.ndarray
) -> np.ndarray:
    """Codes of another grid at nodes and along line axes of ours.

    Parameters
    ----------
    positions : sequence of ndarray
        From `node_positions`.
    nodes : ndarray of int, shape (n_nodes, n_node_axes)
        Indices in our axes.
    lines : ndarray of int, shape (n_lines,)
        Positions in the other grid.

    Returns
    -------
    ndarray of uint16, shape (n_nodes, n_lines, n_vmic, n_dA)
    """
    theirs = tuple(positions[axis][nodes[:, axis]] for axis in range(nodes.shape[1]))
    *_, vmic, dA = positions
    return other.gather(treatment, theirs, lines)[..., vmic[:, None], dA[None, :]]


def confirmed(
    codes: np.ndarray, engine: Engine, atmospheres: Sequence[Any], lines: LineList, vmic: np.ndarray, dA: np.ndarray
) -> np.ndarray:
    """True for lines whose stored codes the engine reproduces at all given atmospheres.

    Parameters
    ----------
    codes : ndarray of uint16, shape (n_atmospheres, n_lines, n_vmic, n_dA)
    """
    fresh = codes_of_nodes(engine, atmospheres, lines, vmic, dA)
    near = np.abs(fresh.astype(np.int64) - codes.astype(np.int64)) <= TOLERANCE
    return (near & ((fresh == MISSING) == (codes == MISSING))).all(axis=(0, 2, 3))


def probe_nodes(nodes: Sequence[tuple[int, ...]], salt: str) -> list[tuple[int, ...]]:
    """`PROBES` of the nodes, chosen by a hash so that nobody can choose them well."""

    def rank(node: tuple[int, ...]) -> bytes:
        return hashlib.sha256(f"{salt} {node}".encode()).digest()

    return sorted(nodes, key=rank)[:PROBES]
