"""A response grid on disk: `grid.json` beside memory-mapped blocks of codes.

Layout of a grid directory::

    grid.json       axes, units, lines, treatments, blocks with checksums; written last, by an atomic rename
    lte_000.npy     codes of at most 32 lines, shape (teff, logg, mh, line, vmic, dA), little-endian uint16

The node axes (teff, logg, mh) come first, in the order of the header; code elsewhere loops over them.
"""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np

from specsolve.errors import StoreError, UsageError
from specsolve.grid.axes import Axis
from specsolve.grid.codes import CODE_TYPE, MISSING
from specsolve.grid.stencil import NodeStencils
from specsolve.lines import LineList

HEADER_NAME = "grid.json"
FORMAT_NAME = "specsolve response grid"
SCHEMA = 1
LINES_PER_BLOCK = 32
PACKAGED = Path(__file__).resolve().parent.parent / "data" / "grid"


@dataclass(frozen=True)
class Block:
    """One array file: which lines of the header it holds, for which treatment."""

    file: str
    treatment: str
    first_line: int
    n_lines: int
    sha256: str


@dataclass(frozen=True, eq=False)
class ResponseGrid:
    """Equivalent widths of a line list over stellar parameters, abundance and microturbulence.

    Attributes
    ----------
    directory : Path
    header : dict
        Content of `grid.json`.
    node_axes, line_axes : tuple of Axis
        Axes that need an atmosphere a node (teff, logg, mh), and the two that do not (vmic, dA).
    lines : LineList
        In the order of the store (blocks appended later come last).

    Examples
    --------
    >>> grid = ResponseGrid.packaged()                                          # doctest: +SKIP
    >>> grid.axes["logg"].min(), len(grid.lines), grid.treatments               # doctest: +SKIP
    (0.0, 210, ('lte',))
    """

    directory: Path
    header: dict[str, Any]
    node_axes: tuple[Axis, ...]
    line_axes: tuple[Axis, ...]
    lines: LineList

    @classmethod
    def packaged(cls) -> ResponseGrid:
        """The grid that comes with specsolve."""
        return cls.open(PACKAGED)

    @classmethod
    def open(cls, directory: str | Path, verify: bool = True) -> ResponseGrid:
        """Open a grid directory.

        Parameters
        ----------
        directory : path-like
        verify : bool
            Compare the sha256 of every block with the header (about 1 ms a MB).

        Raises
        ------
        StoreError
            No grid there, another schema, a damaged header, a block missing, of another shape or with a wrong
            checksum.
        """
        directory = Path(directory)
        header = read_header(directory)
        try:
            node_axes = tuple(Axis(a["name"], a["unit"], a["values"]) for a in header["node_axes"])
            line_axes = tuple(Axis(a["name"], a["unit"], a["values"]) for a in header["line_axes"])
            lines = LineList.from_columns(header["lines"])
            grid = cls(directory, header, node_axes, line_axes, lines)
            blocks = grid.blocks
        except (KeyError, TypeError, ValueError) as error:
            raise StoreError(
                f"{directory / HEADER_NAME} is damaged ({error}); build the grid anew", path=directory
            ) from error
        for block in blocks:
            grid._check_block(block, verify)
        return grid

    def __reduce__(self):
        """Pickled by folder: another process maps the same files."""
        return _reopen, (self.directory, self.identity)

    @cached_property
    def axes(self) -> dict[str, np.ndarray]:
        """Node values of every axis by name: teff, logg, mh, vmic, dA."""
        return {axis.name: axis.values for axis in (*self.node_axes, *self.line_axes)}

    @property
    def node_shape(self) -> tuple[int, ...]:
        """Number of nodes along each node axis."""
        return tuple(len(axis) for axis in self.node_axes)

    @cached_property
    def blocks(self) -> tuple[Block, ...]:
        """Array files, in the order of the lines."""
        return tuple(Block(**entry) for entry in self.header["blocks"])

    @property
    def treatments(self) -> tuple[str, ...]:
        """Names of the treatments, for example ("lte",)."""
        return tuple(self.header["treatments"])

    @property
    def default_treatment(self) -> str:
        """The treatment that is used if none is asked for: nlte where the grid has it, else its first."""
        return "nlte" if "nlte" in self.treatments else self.treatments[0]

    def treatments_asked(self, asked: str | None) -> tuple[str, ...]:
        """Treatments that a user's word stands for: one, "both", or the default for None.

        Raises
        ------
        UsageError
            If the grid lacks one.
        """
        names = ("lte", "nlte") if asked == "both" else (asked or self.default_treatment,)
        for name in names:
            if name not in self.treatments:
                raise UsageError(f"treatment '{name}' is not in the grid; it has {', '.join(self.treatments)}")
        return names

    @property
    def atmospheres_identity(self) -> str:
        """sha256 (hex) of the store of atmospheres that the widths were computed on."""
        return self.header["atmospheres_identity"]

    @property
    def description(self) -> str:
        """What the grid is, in words."""
        return self.header["description"]

    @cached_property
    def identity(self) -> str:
        """sha256 (hex) of the header, which holds the checksums of all blocks."""
        return hashlib.sha256(canonical_json(self.header).encode()).hexdigest()

    def missing(self, treatment: str) -> dict[tuple[int, ...], str]:
        """Reason by node index (teff, logg, mh) of the nodes that have no widths."""
        return {tuple(entry["node"]): entry["reason"] for entry in self._treatment(treatment)["missing"]}

    def node_valid(self, treatment: str) -> np.ndarray:
        """True where a node has widths; bool, shape (teff, logg, mh)."""
        valid = np.ones(self.node_shape, dtype=bool)
        for node in self.missing(treatment):
            valid[node] = False
        return valid

    def stencils(self, treatment: str) -> NodeStencils:
        """Maps from node values to the cubics of cells; made once a treatment, they serve all interpolators."""
        if treatment not in self._stencils:
            self._stencils[treatment] = NodeStencils(
                [axis.values for axis in self.node_axes], self.node_valid(treatment)
            )
        return self._stencils[treatment]

    def codes(self, block: Block) -> np.ndarray:
        """Memory-mapped codes of a block, shape (teff, logg, mh, line, vmic, dA)."""
        return np.load(self.directory / block.file, mmap_mode="r", allow_pickle=False)

    def gather(self, treatment: str, nodes: tuple[np.ndarray, ...], line_indices: np.ndarray) -> np.ndarray:
        """Codes of some lines at some nodes.

        Parameters
        ----------
        nodes : tuple of ndarray, each of shape (n_nodes,)
            Indices along teff, logg, mh.
        line_indices : ndarray, shape (n_lines,)
            Positions in `lines`.

        Returns
        -------
        ndarray of uint16, shape (n_nodes, n_lines, n_vmic, n_dA)
        """
        shape = (nodes[0].size, line_indices.size, *(len(axis) for axis in self.line_axes))
        out = np.full(shape, MISSING, dtype=CODE_TYPE)
        flat = np.ravel_multi_index(nodes, self.node_shape)
        for codes, inside, place in self.flat_blocks(treatment, line_indices):
            out[:, place] = codes[flat[:, None], inside[None, :]]
        return out

    def flat_blocks(self, treatment: str, line_indices: np.ndarray) -> list[tuple[np.ndarray, np.ndarray, np.ndarray]]:
        """The blocks that hold some lines, with the node axes flattened; for kernels.

        Returns
        -------
        list of (codes, inside, place)
            Mapped codes of shape (n_nodes, n_block_lines, n_vmic, n_dA), the positions of the lines in the block and
            in `line_indices`.
        """
        self._treatment(treatment)
        found = []
        for block in self.blocks:
            place = np.flatnonzero(
                (line_indices >= block.first_line) & (line_indices < block.first_line + block.n_lines)
            )
            if block.treatment == treatment and place.size:
                mapped = self._mapped[block.file]
                codes = np.asarray(mapped).reshape(-1, *mapped.shape[-3:])
                found.append((codes, line_indices[place] - block.first_line, place))
        return found

    def locate(self, keys) -> np.ndarray:
        """Position in `lines` of each line key, -1 where the grid lacks the line."""
        return self.lines.position_of(keys)

    @cached_property
    def _stencils(self) -> dict[str, NodeStencils]:
        return {}

    @cached_property
    def node_tables(self) -> dict[str, Any]:
        """Tables of the compiled path by treatment, see `specsolve.grid.node_table`."""
        return {}

    @cached_property
    def _mapped(self) -> dict[str, np.ndarray]:
        return {block.file: self.codes(block) for block in self.blocks}

    def _treatment(self, treatment: str) -> dict[str, Any]:
        if treatment not in self.header["treatments"]:
            raise StoreError(
                f"{self.directory} has no treatment '{treatment}'; it has {', '.join(self.treatments)}",
                path=self.directory,
            )
        return self.header["treatments"][treatment]

    def _check_block(self, block: Block, verify: bool) -> None:
        path = self.directory / block.file
        expected = (*self.node_shape, block.n_lines, *(len(axis) for axis in self.line_axes))
        try:
            codes = self.codes(block)
            if codes.dtype != CODE_TYPE or codes.shape != expected:
                raise StoreError(
                    f"{path} holds {codes.dtype} {codes.shape}, the header says uint16 {expected}", path=path
                )
            if verify and file_sha256(path) != block.sha256:
                raise StoreError(f"{path} has a wrong checksum: it is damaged; build the grid anew", path=path)
        except (OSError, ValueError, EOFError) as error:
            raise StoreError(f"{path} cannot be read ({error}); build the grid anew", path=path) from error


def _reopen(directory: Path, identity: str) -> ResponseGrid:
    grid = ResponseGrid.open(directory, verify=False)
    if grid.identity != identity:
        raise StoreError(f"{directory} has changed while it was in use; start again", path=directory)
    return grid


def read_header(directory: Path) -> dict[str, Any]:
    """Content of `grid.json`, after a check of what it is.

    Raises
    ------
    StoreError
    """
    path = directory / HEADER_NAME
    try:
        header = json.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError as error:
        raise StoreError(
            f"{directory} holds no finished grid; make one: specsolve grid build LINELIST --output {directory}",
            path=directory,
        ) from error
    except (OSError, ValueError) as error:
        raise StoreError(f"{path} cannot be read ({error}); build the grid anew", path=path) from error
    if not isinstance(header, dict) or header.get("format") != FORMAT_NAME:
        raise StoreError(f"{path} is not a response grid of specsolve", path=path)
    if header.get("schema") != SCHEMA:
        raise StoreError(
            f"{path} has schema {header.get('schema')}, this version reads schema {SCHEMA}; build the grid anew",
            path=path,
            schema=header.get("schema"),
        )
    return header


def canonical_json(content: Any) -> str:
    """JSON text that depends on the content alone (sorted keys, no nan)."""
    return json.dumps(content, sort_keys=True, separators=(",", ":"), allow_nan=False)


def file_sha256(path: Path) -> str:
    """sha256 (hex) of a file."""
    with open(path, "rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()
