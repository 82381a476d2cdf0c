"""Rows of the four tables of a solve as text, so that many stars can be written as they are finished.

The text is what astropy writes as ECSV with commas: the head of a file comes from astropy itself, the rows from here, at
a tenth of the time. Numbers are written so that they read back exactly.
"""

from __future__ import annotations

import io
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.report.tables import candidate_rows, decision_rows, line_columns, make_table, star_row
from specsolve.schema import COUNT, FLAG, REAL, TEXT, Column, columns_of

if TYPE_CHECKING:
    from specsolve.balance.solution import Solution

QUOTED = (",", '"', "\n", "\r")
DUMMY: Mapping[str, Any] = {TEXT: "x", REAL: 0.0, COUNT: 0, FLAG: False}


@dataclass(frozen=True, kw_only=True)
class Record:
    """One finished star as text.

    Attributes
    ----------
    star, treatment, status, reason : str
    rows : dict of str to str
        By kind of table; each row ends with a newline.
    """

    star: str
    treatment: str
    status: str
    reason: str
    rows: dict[str, str]


def record_of(solution: Solution) -> Record:
    """The rows of one solution."""
    candidates, decisions = candidate_rows(solution), decision_rows(solution)
    return Record(
        star=solution.star,
        treatment=solution.treatment,
        status=solution.status,
        reason=solution.reason,
        rows={
            "stars": rows_text("stars", _columnwise("stars", [star_row(solution)])),
            "lines": rows_text("lines", line_columns(solution)),
            "candidates": rows_text("candidates", _columnwise("candidates", candidates)),
            "decisions": rows_text("decisions", _columnwise("decisions", decisions)),
        },
    )


def table_head(kind: str, provenance: Mapping[str, Any] | None) -> str:
    """Everything of an ECSV file before its rows: types, units, descriptions, provenance, names."""
    columns = {column.name: _dummy(column) for column in columns_of(kind)}
    stream = io.StringIO()
    make_table(kind, columns, provenance).write(stream, format="ascii.ecsv", delimiter=",")
    return "".join(line + "\n" for line in stream.getvalue().splitlines()[:-1])


def rows_text(kind: str, values: Mapping[str, Sequence[Any]]) -> str:
    """Rows of a table, each ended by a newline.

    Parameters
    ----------
    kind : str
    values : mapping
        Every column of the schema, in any order.

    Examples
    --------
    >>> rows = {"star": ["A, B"], "treatment": ["lte"], "step": [1], "kind": ["choose"], "subject": ["candidate 1"]}
    >>> rows_text("decisions", rows | {"value": [0.1], "threshold": [np.nan], "outcome": ["chosen"], "reason": [""]})
    '"A, B",lte,1,choose,candidate 1,0.1,nan,chosen,\\n'
    """
    cells = [_cells(column, values[column.name]) for column in columns_of(kind)]
    return "".join(f"{','.join(row)}\n" for row in zip(*cells, strict=True))


def _cells(column: Column, values: Sequence[Any]) -> list[str]:
    if column.dtype == TEXT:
        texts = values.tolist() if isinstance(values, np.ndarray) else values
        quoted = {text: _quoted(text) for text in set(texts)}  # most texts of a table are repeated
        return [quoted[text] for text in texts]
    dtype = {REAL: np.float64, COUNT: np.int64, FLAG: bool}[column.dtype]
    plain = np.asarray(values, dtype=dtype).tolist()
    if column.shape:
        return [f'"{json.dumps(value, separators=(",", ":"))}"' for value in plain]
    return list(map(repr, plain))


def _quoted(value: Any) -> str:
    text = str(value)
    if not any(mark in text for mark in QUOTED):
        return text
    text = " ".join(text.split()) if "\n" in text or "\r" in text else text
    return '"' + text.replace('"', '""') + '"'


def _columnwise(kind: str, rows: Sequence[Mapping[str, Any]]) -> dict[str, list[Any]]:
    return {column.name: [row[column.name] for row in rows] for column in columns_of(kind)}


def _dummy(column: Column) -> np.ndarray:
    if column.shape:
        return np.zeros((1, *column.shape))
    return np.array([DUMMY[column.dtype]])
