"""What a build of a response grid has to do: nodes, lines, what is there already, and the key of it all."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.errors import InputError, MissingNodeError, StoreError
from specsolve.grid import reuse
from specsolve.grid.axes import DEFAULT_DA, DEFAULT_VMIC, NODE_AXES, UNITS, Axis, choose_nodes
from specsolve.grid.engine import ENGINES, Engine
from specsolve.grid.store import HEADER_NAME, LINES_PER_BLOCK, SCHEMA, ResponseGrid, canonical_json
from specsolve.lines import LineList

if TYPE_CHECKING:
    from specsolve.atmosphere.store import AtmosphereStore

LINES_PER_PART = 600
"""Lines times nodes of a part: about two seconds of work."""

MAX_NODES_PER_PART = 64


@dataclass(frozen=True, kw_only=True)
class Plan:
    """What a build has to do.

    Attributes
    ----------
    old : ResponseGrid or None
        The grid that stands in the directory already.
    lines : LineList
        All lines of the finished grid.
    covered : int
        The first so many of them are in the blocks of `old`.
    taken : dict
        Position in `lines` -> (grid, position there) of lines taken over.
    computed : ndarray of int
        Positions in `lines` that have to be computed.
    remarks : tuple of str
        What the user should know.
    """

    treatment: str
    node_axes: tuple[Axis, ...]
    line_axes: tuple[Axis, ...]
    atmospheres: AtmosphereStore
    nodes: tuple[tuple[int, ...], ...]
    missing: dict[tuple[int, ...], str]
    engine: Engine
    old: ResponseGrid | None
    lines: LineList
    covered: int
    taken: dict[int, tuple[ResponseGrid, int]]
    computed: np.ndarray
    remarks: tuple[str, ...]

    @property
    def new_lines(self) -> LineList:
        """The lines to compute."""
        return self.lines.select(self.computed)

    @property
    def n_widths(self) -> int:
        """Widths a line and node."""
        return len(self.line_axes[0]) * len(self.line_axes[1])

    @property
    def chunks(self) -> list[tuple[tuple[int, ...], ...]]:
        """The nodes of every part."""
        size = max(1, min(MAX_NODES_PER_PART, LINES_PER_PART // max(1, self.computed.size)))
        return [self.nodes[i : i + size] for i in range(0, len(self.nodes), size)] if self.computed.size else []

    @property
    def key(self) -> str:
        """Hash of configuration and sources (hex)."""
        content = {
            "schema": SCHEMA,
            "treatment": self.treatment,
            "axes": {axis.name: axis.values.tolist() for axis in (*self.node_axes, *self.line_axes)},
            "atmospheres": self.atmospheres.identity,
            "engine": dict(self.engine.version),
            "lines": self.lines.identity,
            "computed": self.computed.tolist(),
            "covered": self.covered,
        }
        return hashlib.sha256(canonical_json(content).encode()).hexdigest()

    def atmosphere(self, node: tuple[int, ...]) -> Any:
        """The atmosphere of a node."""
        return atmosphere_at(self.atmospheres, self.node_axes, node)


def plan_build(
    lines: LineList,
    directory: str | Path,
    atmospheres: AtmosphereStore | None = None,
    axes: Mapping[str, Sequence[float] | None] | None = None,
    treatment: str = "lte",
    others: Sequence[ResponseGrid] = (),
    engine: Engine | None = None,
) -> Plan:
    """Find out what a build has to do, without writing anything; arguments as in `build_grid`.

    Raises
    ------
    StoreError
        The grid in the directory has other axes or atmospheres, or another engine computed it.
    InputError
        Unknown treatment, nodes without atmospheres, no lines.
    """
    directory = Path(directory)
    if len(lines) == 0:
        raise InputError("the line list is empty")
    if engine is None:
        if treatment not in ENGINES:
            raise InputError(f"treatment '{treatment}' is unknown; there are {', '.join(ENGINES)}")
        engine = ENGINES[treatment]()
    if atmospheres is None:
        from specsolve.atmosphere.store import AtmosphereStore

        atmospheres = AtmosphereStore.packaged()
    old = ResponseGrid.open(directory) if (directory / HEADER_NAME).exists() else None
    node_axes, line_axes = _axes(axes or {}, atmospheres, old)
    if engine.atmospheres_identity not in ("", atmospheres.identity):
        raise StoreError("the departures belong to other atmospheres; build them on these, or name the right ones")
    nodes, missing = available_nodes(node_axes, atmospheres, engine)
    if old is not None:
        _check_same(old, node_axes, line_axes, atmospheres)
    wanted, remarks = _all_lines(lines.sorted(), old)
    old_blocks = () if old is None else old.blocks
    covered = max((b.first_line + b.n_lines for b in old_blocks if b.treatment == treatment), default=0)
    site = _Site(treatment, node_axes, line_axes, atmospheres, nodes, engine)
    if 0 < covered < len(wanted):
        _check_engine(old, covered, site)
    taken = _taken_over(wanted, covered, others, site)
    return Plan(
        treatment=treatment,
        node_axes=node_axes,
        line_axes=line_axes,
        atmospheres=atmospheres,
        nodes=nodes,
        missing=missing,
        engine=engine,
        old=old,
        lines=wanted,
        covered=covered,
        taken=taken,
        computed=np.array([i for i in range(covered, len(wanted)) if i not in taken], dtype=np.int64),
        remarks=remarks,
    )


@dataclass(frozen=True)
class _Site:
    """Where and with what widths are computed; the part of a plan that is known before its lines."""

    treatment: str
    node_axes: tuple[Axis, ...]
    line_axes: tuple[Axis, ...]
    atmospheres: AtmosphereStore
    nodes: tuple[tuple[int, ...], ...]
    engine: Engine

    def confirmed(self, codes: np.ndarray, probes: Sequence[tuple[int, ...]], lines: LineList) -> np.ndarray:
        """True for lines whose codes at the probe nodes the engine reproduces."""
        models = [atmosphere_at(self.atmospheres, self.node_axes, node) for node in probes]
        return reuse.confirmed(codes, self.engine, models, lines, *(axis.values for axis in self.line_axes))


def atmosphere_at(atmospheres: AtmosphereStore, node_axes: Sequence[Axis], node: Sequence[int]) -> Any:
    """The atmosphere of a node given by its indices."""
    return atmospheres.get(*(float(axis.values[i]) for axis, i in zip(node_axes, node, strict=True)))


def _axes(axes, atmospheres, old) -> tuple[tuple[Axis, ...], tuple[Axis, ...]]:
    standing = {} if old is None else old.axes
    node_axes = tuple(
        Axis(name, UNITS[name], choose_nodes(name, atmospheres.axes[name], _given(axes, name, standing.get(name))))
        for name in NODE_AXES
    )
    line_axes = tuple(
        Axis(name, UNITS[name], np.unique(_given(axes, name, standing.get(name, default))))
        for name, default in (("vmic", DEFAULT_VMIC), ("dA", DEFAULT_DA))
    )
    return node_axes, line_axes


def _given(axes, name, default):
    return default if axes.get(name) is None else np.asarray(axes[name], dtype=np.float64)


def available_nodes(
    node_axes: Sequence[Axis], atmospheres, engine: Engine | None = None
) -> tuple[tuple[tuple[int, ...], ...], dict[tuple[int, ...], str]]:
    """Node indices that have what the engine needs, and the reason of each that has not.

    Raises
    ------
    InputError
        If no node has one.
    """
    nodes, missing = [], {}
    for node in np.ndindex(*(len(axis) for axis in node_axes)):
        try:
            atmosphere_at(atmospheres, node_axes, node)
        except MissingNodeError as error:
            missing[node] = error.reason
            continue
        reason = ""
        if engine is not None and engine.unavailable is not None:
            reason = engine.unavailable(*(float(axis.values[i]) for axis, i in zip(node_axes, node, strict=True)))
        if reason:
            missing[node] = reason
        else:
            nodes.append(node)
    if not nodes:
        raise InputError("none of the chosen nodes has an atmosphere")
    return tuple(nodes), missing


def _check_same(old: ResponseGrid, node_axes, line_axes, atmospheres) -> None:
    for axis in (*node_axes, *line_axes):
        if not np.array_equal(old.axes[axis.name], axis.values):
            raise StoreError(
                f"{old.directory} is a grid with {axis.name} = {old.axes[axis.name].tolist()}, "
                f"not {axis.values.tolist()}; choose another --output",
                path=old.directory,
            )
    if old.atmospheres_identity != atmospheres.identity:
        raise StoreError(f"{old.directory} was built on other atmospheres; choose another --output", path=old.directory)


def _all_lines(lines: LineList, old: ResponseGrid | None) -> tuple[LineList, tuple[str, ...]]:
    if old is None:
        return lines, lines.remarks
    place = old.lines.position_of(lines.key)
    same = reuse.same_lines(lines, old.lines)
    remarks = [
        f"{lines.key[i]} is in the grid with log gf {old.lines.log_gf[place[i]]:.3f} and its damping; the list's "
        f"(log gf {lines.log_gf[i]:.3f}) do not replace them. A log_gf column in a table to solve does."
        for i in np.flatnonzero((place >= 0) & (same < 0))
    ]
    return old.lines.joined(lines.select(np.flatnonzero(place < 0))), (*lines.remarks, *remarks)


def _check_engine(old: ResponseGrid, covered: int, site: _Site) -> None:
    probes = reuse.probe_nodes(site.nodes, old.identity)
    index = np.arange(covered)[:: max(1, covered // LINES_PER_BLOCK)]
    codes = old.gather(site.treatment, tuple(np.array(probes).T), index)
    if not site.confirmed(codes, probes, old.lines.select(index)).all():
        raise StoreError(
            f"{old.directory} was computed by another version: its widths differ from today's. "
            "Choose another --output.",
            path=old.directory,
        )


def _taken_over(
    wanted: LineList, covered: int, others: Sequence[ResponseGrid], site: _Site
) -> dict[int, tuple[ResponseGrid, int]]:
    taken: dict[int, tuple[ResponseGrid, int]] = {}
    for other in others:
        positions = reuse.node_positions(other, site.node_axes, site.line_axes)
        same = other.atmospheres_identity == site.atmospheres.identity and site.treatment in other.treatments
        if positions is None or not same:
            continue
        candidates = np.array([i for i in range(covered, len(wanted)) if i not in taken], dtype=np.int64)
        place = reuse.same_lines(wanted.select(candidates), other.lines)
        candidates, place = candidates[place >= 0], place[place >= 0]
        if candidates.size:
            probes = reuse.probe_nodes(site.nodes, other.identity)
            codes = reuse.codes_of_other(other, site.treatment, positions, np.array(probes), place)
            good = site.confirmed(codes, probes, wanted.select(candidates))
            taken |= {int(i): (other, int(p)) for i, p in zip(candidates[good], place[good], strict=True)}
    return taken
