"""A response grid moved to another [alpha/Fe] or missing-opacity multiplier by stored first-order responses.

It is a `ResponseGrid` like any other, its codes made in memory from those on disk; everything that works on a grid works
on it. With [alpha/Fe] given as one number, the step at each node is that number minus the law of the node's metallicity.
"""

from __future__ import annotations

import hashlib
from collections import OrderedDict
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np

from specsolve.errors import UsageError
from specsolve.grid.codes import CODE_TYPE, MISSING, STEP
from specsolve.grid.perturbations import ALPHA, MISSING_OPACITY, Perturbations
from specsolve.grid.store import Block, ResponseGrid
from specsolve.matter.composition import alpha_law

KEPT_GRIDS = 3  # moved grids kept in memory; about 30 MB each
NO_RESPONSE = "no response to [alpha/Fe] or the missing opacity: the changed atmosphere did not converge"
ALPHA_LIMITS = (-0.5, 1.0)  # dex; beyond, no star is known and no response is tested (common practice, no source)


@dataclass(frozen=True, eq=False)
class PerturbedGrid(ResponseGrid):
    """A grid moved by first-order responses; make it with `perturbed_grid`.

    Attributes
    ----------
    unperturbed : ResponseGrid
        The grid on disk.
    alpha : float or None
        [alpha/Fe] at all nodes [dex]; None for the law that the atmospheres follow.
    missing_opacity : float
        Power of the missing-opacity multiplier minus one.
    """

    unperturbed: ResponseGrid | None = None
    alpha: float | None = None
    missing_opacity: float = 0.0

    def __reduce__(self):
        """Pickled by folder and steps: another process maps the same files and moves them itself."""
        return _reopen_perturbed, (self.directory, self.unperturbed.identity, self.alpha, self.missing_opacity)

    @cached_property
    def identity(self) -> str:
        """sha256 (hex) of the grid on disk and the steps."""
        text = f"{self.unperturbed.identity} {self.alpha!r} {self.missing_opacity!r}"
        return hashlib.sha256(text.encode()).hexdigest()

    def missing(self, treatment: str) -> dict[tuple[int, ...], str]:
        """Reason by node index of the nodes that have no widths, those without a response among them."""
        found = dict(self.unperturbed.missing(treatment))
        for node in np.argwhere(~self._responds):
            found.setdefault(tuple(int(i) for i in node), NO_RESPONSE)
        return found

    @cached_property
    def _responds(self) -> np.ndarray:
        """Nodes at which all responses that are asked for are known; bool, shape (teff, logg, mh)."""
        known = np.ones(int(np.prod(self.node_shape)), dtype=bool)
        for name in self.steps():
            known &= np.isfinite(responses_at_nodes(self.unperturbed, name)[:, 0, 0, 0])
        return known.reshape(self.node_shape)

    def codes(self, block: Block) -> np.ndarray:
        """Codes of a block, shape (teff, logg, mh, line, vmic, dA)."""
        return self._mapped[block.file]

    def steps(self) -> dict[str, np.ndarray]:
        """p of each perturbation at the nodes, shape (n_nodes,), for those that are not zero."""
        shape = self.node_shape
        found = {}
        if self.alpha is not None:
            names = [axis.name for axis in self.node_axes]
            mh = np.asarray(self.node_axes[names.index("mh")].values, float)
            along = np.array([self.alpha - alpha_law(value) for value in mh])
            view = [1] * len(shape)
            view[names.index("mh")] = mh.size
            found[ALPHA] = np.broadcast_to(along.reshape(view), shape).ravel()
        if self.missing_opacity != 0.0:
            found[MISSING_OPACITY] = np.full(int(np.prod(shape)), self.missing_opacity)
        return found

    @cached_property
    def _mapped(self) -> Mapping[str, np.ndarray]:
        return _MovedBlocks(self)


class _MovedBlocks(Mapping):
    """Moved codes by file name, each made when first asked for."""

    def __init__(self, grid: PerturbedGrid) -> None:
        self._grid, self._made = grid, {}
        self._blocks = {block.file: block for block in grid.blocks}

    def __len__(self) -> int:
        return len(self._blocks)

    def __iter__(self) -> Iterator[str]:
        return iter(self._blocks)

    def __getitem__(self, file: str) -> np.ndarray:
        if file not in self._made:
            grid, block = self._grid, self._blocks[file]
            codes = np.array(grid.unperturbed.codes(block))
            flat = codes.reshape(-1, *codes.shape[-3:])
            lines = slice(block.first_line, block.first_line + block.n_lines)
            for name, step in grid.steps().items():
                _move(flat, step, responses_at_nodes(grid.unperturbed, name)[:, lines])
            self._made[file] = codes
        return self._made[file]


def _move(codes: np.ndarray, step: np.ndarray, responses: np.ndarray) -> None:
    """Add p R to codes of shape (n_nodes, n_lines, n_vmic, n_dA) in place; a width beyond the codes becomes missing."""
    for node in np.flatnonzero(step):
        here = codes[node]
        moved = here + np.rint(responses[node] * np.float32(step[node] / STEP))
        gone = (here == MISSING) | ~((moved >= 0) & (moved < MISSING))
        codes[node] = np.where(gone, MISSING, moved).astype(CODE_TYPE)


_EXPANDED: dict[str, tuple[str, np.ndarray]] = {}
_MOVED: OrderedDict[tuple, PerturbedGrid] = OrderedDict()


def responses_at_nodes(grid: ResponseGrid, name: str) -> np.ndarray:
    """R at all nodes of a grid, float32 of shape (n_nodes, n_lines, n_vmic, n_dA); kept for the latest grid."""
    kept = _EXPANDED.get(name)
    if kept is None or kept[0] != grid.identity:
        kept = _EXPANDED[name] = (grid.identity, Perturbations.of_grid(grid).expanded(name, grid))
    return kept[1]


def perturbed_grid(grid: ResponseGrid, alpha: float | None = None, missing_opacity: float = 0.0) -> ResponseGrid:
    """The grid at another [alpha/Fe] and missing-opacity multiplier; the grid itself if nothing is changed.

    Parameters
    ----------
    grid : ResponseGrid
    alpha : float, optional
        [alpha/Fe] of the star [dex], whatever its metallicity.
    missing_opacity : float
        Power of the multiplier minus one: -1 without it, 1 for twice its logarithm.

    Raises
    ------
    UsageError
        If alpha is out of range, or no responses are stored for the grid.

    Examples
    --------
    >>> perturbed_grid(grid, alpha=0.3).alpha                                  # doctest: +SKIP
    0.3
    """
    if alpha is None and missing_opacity == 0.0:
        return grid
    if alpha is not None and not ALPHA_LIMITS[0] <= alpha <= ALPHA_LIMITS[1]:
        raise UsageError(f"alpha = {alpha:g} lies outside {ALPHA_LIMITS[0]:g} to {ALPHA_LIMITS[1]:g}")
    base = grid.unperturbed if isinstance(grid, PerturbedGrid) else grid
    key = (base.identity, alpha, missing_opacity)
    if key not in _MOVED:
        Perturbations.of_grid(base)
        _MOVED[key] = PerturbedGrid(
            base.directory, base.header, base.node_axes, base.line_axes, base.lines, base, alpha, missing_opacity
        )
        while len(_MOVED) > KEPT_GRIDS:
            _MOVED.popitem(last=False)
    _MOVED.move_to_end(key)
    return _MOVED[key]


def _reopen_perturbed(directory: Path, identity: str, alpha: float | None, missing_opacity: float) -> Any:
    from specsolve.grid.store import _reopen

    return perturbed_grid(_reopen(directory, identity), alpha, missing_opacity)
