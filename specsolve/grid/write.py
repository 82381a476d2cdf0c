"""Writing a grid so that a crash at any moment leaves the old one or the new one, never a mixture."""

from __future__ import annotations

import hashlib
import io
import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from specsolve.constants import SOLAR_IRON
from specsolve.durable import output_errors, write_atomically
from specsolve.grid.axes import Axis
from specsolve.grid.codes import CODE_TYPE, FIRST_LOG_WIDTH, MISSING, STEP
from specsolve.grid.store import FORMAT_NAME, HEADER_NAME, LINES_PER_BLOCK, SCHEMA, Block
from specsolve.lines import LineList


def npy_bytes(array: np.ndarray) -> bytes:
    """The array as the content of an .npy file."""
    stream = io.BytesIO()
    np.save(stream, array, allow_pickle=False)
    return stream.getvalue()


def write_block(directory: Path, treatment: str, number: int, first_line: int, codes: np.ndarray) -> Block:
    """Write one array file and return its entry for the header."""
    content = npy_bytes(np.ascontiguousarray(codes, dtype=CODE_TYPE))
    name = f"{treatment}_{number:03d}.npy"
    write_atomically(directory / name, content)
    return Block(name, treatment, first_line, codes.shape[-3], hashlib.sha256(content).hexdigest())


def write_header(directory: Path, header: Mapping[str, Any]) -> None:
    """Write `grid.json`; with this the grid exists."""
    text = json.dumps(header, indent=1, sort_keys=True, allow_nan=False) + "\n"
    write_atomically(directory / HEADER_NAME, text.encode())


def make_header(
    *,
    node_axes: Sequence[Axis],
    line_axes: Sequence[Axis],
    lines: LineList,
    blocks: Sequence[Block],
    missing: Mapping[str, Mapping[tuple[int, ...], str]],
    atmospheres_identity: str,
    description: str,
    builds: Sequence[Mapping[str, Any]] = (),
) -> dict[str, Any]:
    """Content of `grid.json`. It holds no time, host or path: the same input gives the same bytes.

    Parameters
    ----------
    missing : mapping
        Treatment to {node index: reason}.
    builds : sequence of mapping
        Of every finished build: its key, the engine, the first line, how many lines were computed and taken over.
    """
    return {
        "format": FORMAT_NAME,
        "schema": SCHEMA,
        "description": description,
        "node_axes": [axis_entry(axis) for axis in node_axes],
        "line_axes": [axis_entry(axis) for axis in line_axes],
        "array_order": [*(a.name for a in node_axes), "line", *(a.name for a in line_axes)],
        "code": {
            "quantity": "log10(W/lambda)",
            "first": FIRST_LOG_WIDTH,
            "step": STEP,
            "missing": MISSING,
            "type": CODE_TYPE.str,
        },
        "abundance": {"definition": "A(Fe) = solar_iron + mh + dA", "solar_iron": SOLAR_IRON},
        "lines": lines.to_columns(),
        "treatments": {
            name: {"missing": [{"node": list(node), "reason": reason} for node, reason in sorted(nodes.items())]}
            for name, nodes in missing.items()
        },
        "blocks": [vars(block) for block in blocks],
        "atmospheres_identity": atmospheres_identity,
        "builds": [dict(build) for build in builds],
    }


def axis_entry(axis: Axis) -> dict[str, Any]:
    """An axis as it stands in the header."""
    return {"name": axis.name, "unit": axis.unit, "values": axis.values.tolist()}


def write_grid(directory: Path, codes: Mapping[str, np.ndarray], lines: LineList, **header: Any) -> None:
    """Write a whole grid from arrays in memory.

    Parameters
    ----------
    codes : mapping
        Treatment to codes of shape (teff, logg, mh, line, vmic, dA).
    header
        What `make_header` wants beside lines and blocks.
    """
    with output_errors(directory):
        directory.mkdir(parents=True, exist_ok=True)
    blocks = []
    for treatment, array in codes.items():
        for number, first in enumerate(range(0, len(lines), LINES_PER_BLOCK)):
            part = array[..., first : first + LINES_PER_BLOCK, :, :]
            blocks.append(write_block(directory, treatment, number, first, part))
    write_header(directory, make_header(lines=lines, blocks=blocks, **header))
