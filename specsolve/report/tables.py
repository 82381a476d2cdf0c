"""Solutions as tables: written by the schema, read back by the schema.

One solve writes ``X.ecsv`` (star x treatment), ``X_lines.ecsv``, ``X_candidates.ecsv`` and ``X_decisions.ecsv``.
ECSV is the master copy; every file carries the schema number, the kind of table and the provenance in its metadata.
"""

from __future__ import annotations

import errno
import json
import os
import tempfile
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.errors import ColumnError, InputError, OutputError, StoreError
from specsolve.schema import COUNT, FILE_ENDINGS, FLAG, PARAMETERS, REAL, RESIDUALS, SCHEMA, TEXT, Column, columns_of

if TYPE_CHECKING:
    from astropy.table import Table

    from specsolve.balance.solution import Candidate, Decision, IonAbundance, Solution

LINE_ARRAYS_BY_PARAMETER = (
    ("d_abundance", ("teff", "logg", "mh", "vmic")),
    ("influence", ("teff", "logg", "feh", "vmic")),
)
JOIN = ", "


def star_row(solution: Solution) -> dict[str, Any]:
    """The row of one solution in ``X.ecsv``.

    Parameters
    ----------
    solution : Solution

    Returns
    -------
    dict
        Column name to value, every column of the schema.
    """
    row: dict[str, Any] = {
        "flags": JOIN.join(solution.flags),
        "fixed": JOIN.join(solution.fixed),
        "removed_residuals": JOIN.join(solution.removed_residuals),
        "validity": " ".join(solution.validity),
        "notes": " ".join(solution.notes),
        "unmatched": "; ".join(solution.unmatched),
        "n_candidates": len(solution.candidates),
        "configuration": json.dumps(plain(solution.options), sort_keys=True),
        "systematics": json.dumps(plain(solution.systematics)),
        "known": json.dumps(plain(solution.known)),
        "outside": json.dumps(plain(solution.outside)),
    }
    errors_star, errors_list = _sigmas(solution.cov_star), _sigmas(solution.cov_list)
    for i, (name, _, _) in enumerate(PARAMETERS):
        row[name] = solution.parameters[i]
        row[f"{name}_error_star"] = errors_star[i]
        row[f"{name}_error_list"] = errors_list[i]
        alternative = solution.alternative_parameters.get("fe2_alternative")
        row[f"fe2_alternative_{name}"] = np.nan if alternative is None else alternative[i]
    residual_errors = _sigmas(solution.residual_covariance)
    for i, (name, _, _) in enumerate(RESIDUALS):
        row[name] = solution.residuals[i]
        row[f"{name}_error"] = residual_errors[i]
    row |= _ion_columns("fe1", solution.fe1) | _ion_columns("fe2", solution.fe2)
    for item in solution.sensitivities:
        sign = "plus" if item.shift > 0 else "minus"
        row[f"d_fe1_{item.parameter}_{sign}"] = item.d_fe1
        row[f"d_fe2_{item.parameter}_{sign}"] = item.d_fe2
    for column in columns_of("stars"):
        if column.name not in row:
            row[column.name] = getattr(solution, column.name, _blank(column))
    return row


def line_columns(solution: Solution) -> dict[str, np.ndarray]:
    """The rows of one solution in ``X_lines.ecsv``, as columns."""
    lines = solution.lines
    found: dict[str, np.ndarray] = {
        "star": np.full(len(lines), solution.star),
        "treatment": np.full(len(lines), solution.treatment),
    }
    for name, parameters in LINE_ARRAYS_BY_PARAMETER:
        for i, parameter in enumerate(parameters):
            found[f"{name}_{parameter}"] = getattr(lines, name)[:, i]
    for column in columns_of("lines"):
        if column.name not in found:
            found[column.name] = getattr(lines, column.name)
    return found


def candidate_rows(solution: Solution) -> list[dict[str, Any]]:
    """The rows of one solution in ``X_candidates.ecsv``."""
    return [_candidate_row(solution, candidate) for candidate in solution.candidates]


def decision_rows(solution: Solution) -> list[dict[str, Any]]:
    """The rows of one solution in ``X_decisions.ecsv``."""
    return [_decision_row(solution, decision) for decision in solution.decisions]


def tables_of(solutions: Sequence[Solution], provenance: Mapping[str, Any] | None = None) -> dict[str, Table]:
    """The four tables of a solve.

    Parameters
    ----------
    solutions : sequence of Solution
    provenance : mapping, optional
        Into the metadata; that of the first solution if not given.

    Returns
    -------
    dict of str to Table
        Keys "stars", "lines", "candidates", "decisions".
    """
    if provenance is None and solutions:
        provenance = solutions[0].provenance
    lines = [line_columns(solution) for solution in solutions]
    joined = {
        column.name: np.concatenate([part[column.name] for part in lines]) if lines else []
        for column in columns_of("lines")
    }
    rows = {
        "stars": [star_row(solution) for solution in solutions],
        "candidates": [row for solution in solutions for row in candidate_rows(solution)],
        "decisions": [row for solution in solutions for row in decision_rows(solution)],
    }
    tables = {kind: make_table(kind, _columnwise(kind, found), provenance) for kind, found in rows.items()}
    tables["lines"] = make_table("lines", joined, provenance)
    return tables


def make_table(
    kind: str, columns: Mapping[str, Any], provenance: Mapping[str, Any] | None = None, *, subset: bool = False
) -> Table:
    """A table of a known kind, with types, units, descriptions and metadata of the schema.

    Parameters
    ----------
    kind : str
    columns : mapping
        Column name to values.
    provenance : mapping, optional
    subset : bool
        Columns that are not given are left out; else every column of the schema is asked for.

    Raises
    ------
    KeyError
        If a column of the schema is not given.
    """
    from astropy.table import Column as TableColumn
    from astropy.table import Table

    made = Table()
    for column in columns_of(kind):
        if subset and column.name not in columns:
            continue
        values = _typed(column, columns[column.name])
        made[column.name] = TableColumn(values, unit=column.unit or None, description=column.description)
    made.meta = {"schema": SCHEMA, "kind": kind, "provenance": plain(provenance or {})}
    return made


def write_table(table: Table, path: str | Path, *, overwrite: bool = True) -> Path:
    """Write a table as ECSV so that a reader sees the old file or the whole new one, never a part.

    Raises
    ------
    OutputError
        If the folder does not exist, is not writable, or the disk is full.
    """
    path = Path(path)
    if path.exists() and not overwrite:
        raise OutputError(f"{path} exists; choose another --output", path=path)
    name = None
    try:
        handle, name = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.", suffix=".part")
        with os.fdopen(handle, "w", encoding="utf-8", newline="\n") as stream:
            table.write(stream, format="ascii.ecsv", delimiter=",")
            stream.flush()
            os.fsync(stream.fileno())
        os.chmod(name, 0o666 & ~_umask())
        os.replace(name, path)
    except OSError as error:
        if name and os.path.exists(name):
            os.unlink(name)
        raise OutputError(f"cannot write {path}: {_words(error)}", path=path) from error
    except BaseException:
        if name and os.path.exists(name):
            os.unlink(name)
        raise
    return path


def check_writable(output: str | Path) -> None:
    """Find out before the work whether the result can be written.

    Raises
    ------
    OutputError
    """
    folder = Path(output).parent
    if not folder.is_dir():
        raise OutputError(f"cannot write {output}: the folder {folder} does not exist", path=output)
    try:
        handle, name = tempfile.mkstemp(dir=folder, prefix=".specsolve.", suffix=".part")
        try:
            os.write(handle, b" " * 4096)
        finally:
            os.close(handle)
            os.unlink(name)
    except OSError as error:
        raise OutputError(f"cannot write {output}: {_words(error)}", path=output) from error


def output_paths(output: str | Path) -> dict[str, Path]:
    """The four file names of an ``--output``; a trailing ``.ecsv`` is understood.

    Examples
    --------
    >>> str(output_paths("run/cluster.ecsv")["lines"])
    'run/cluster_lines.ecsv'
    """
    path = Path(output)
    stem = path.name.removesuffix(".ecsv")
    return {kind: path.parent / f"{stem}{ending}.ecsv" for kind, ending in FILE_ENDINGS.items()}


def write_solutions(
    solutions: Sequence[Solution], output: str | Path, provenance: Mapping[str, Any] | None = None
) -> dict[str, Path]:
    """Write the four tables of a solve; returns their paths by kind."""
    paths, tables = output_paths(output), tables_of(solutions, provenance)
    for kind in ("lines", "candidates", "decisions", "stars"):
        write_table(tables[kind], paths[kind])
    return paths


def read_table(path: str | Path, kind: str) -> Table:
    """Read back a table of a known kind and check it against the schema.

    Raises
    ------
    InputError
        If the file cannot be read.
    StoreError
        If it is of another kind or of a newer schema.
    ColumnError
        If a column of the schema is missing.
    """
    from astropy.table import Table

    try:
        table = Table.read(path, format="ascii.ecsv")
    except FileNotFoundError as error:
        raise InputError(f"{path}: no such file", path=path) from error
    except Exception as error:
        raise InputError(f"{path} is not a table that specsolve wrote: {type(error).__name__}", path=path) from error
    schema, found = table.meta.get("schema"), table.meta.get("kind")
    if found != kind:
        raise StoreError(f"{path} holds {found or 'an unknown kind of table'}, not {kind}", path=path, schema=schema)
    if not isinstance(schema, int) or schema > SCHEMA:
        raise StoreError(
            f"{path} has schema {schema}; this version reads up to {SCHEMA}. Update specsolve.",
            path=path,
            schema=schema,
        )
    for column in columns_of(kind):
        if column.name not in table.colnames:
            raise ColumnError(
                f"{path} has no column {column.name}", column=column.name, found=table.colnames, path=path
            )
        if column.dtype == TEXT:
            text = np.ma.filled(np.ma.asarray(table[column.name]).astype(str), "")
            table.replace_column(column.name, table.Column(text, name=column.name, description=column.description))
    return table


def to_json(solutions: Iterable[Solution], provenance: Mapping[str, Any] | None = None) -> dict[str, Any]:
    """The same content as a JSON-ready object; undefined numbers are null.

    Returns
    -------
    dict
        Keys schema, provenance, stars; each star has the keys of the star table and lists under "lines",
        "candidates" and "decisions".
    """
    stars = []
    for solution in solutions:
        columns = {name: plain(values) for name, values in line_columns(solution).items()}
        row = plain(star_row(solution))
        row["configuration"] = plain(solution.options)
        row["systematics"], row["outside"] = plain(solution.systematics), plain(solution.outside)
        row["known"] = plain(solution.known)
        row["lines"] = [dict(zip(columns, values, strict=True)) for values in zip(*columns.values(), strict=True)]
        row["candidates"] = plain(candidate_rows(solution))
        row["decisions"] = plain(decision_rows(solution))
        stars.append(row)
    return {"schema": SCHEMA, "provenance": plain(provenance or {}), "stars": stars}


def plain(value: Any) -> Any:
    """Nested plain Python of arrays, tuples and mappings; nan and infinities become None.

    Examples
    --------
    >>> plain({"a": np.array([1.0, np.nan])})
    {'a': [1.0, None]}
    """
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, list | tuple | set | frozenset):
        return [plain(item) for item in value]
    if isinstance(value, np.generic):
        return plain(value.item())
    if isinstance(value, float):
        return value if np.isfinite(value) else None
    if value is None or isinstance(value, str | int | bool):
        return value
    return str(value)


def _candidate_row(solution: Solution, candidate: Candidate) -> dict[str, Any]:
    row: dict[str, Any] = {
        "star": solution.star,
        "treatment": solution.treatment,
        "candidate": candidate.index,
        "flags": JOIN.join(candidate.flags),
    }
    errors = _sigmas(candidate.covariance)
    for i, (name, _, _) in enumerate(PARAMETERS):
        row[name], row[f"{name}_error"] = candidate.parameters[i], errors[i]
    for i, (name, _, _) in enumerate(RESIDUALS):
        row[name] = candidate.residuals[i]
    for column in columns_of("candidates"):
        if column.name not in row:
            row[column.name] = getattr(candidate, column.name)
    return row


def _decision_row(solution: Solution, decision: Decision) -> dict[str, Any]:
    own = {"star": solution.star, "treatment": solution.treatment}
    return own | {
        column.name: getattr(decision, column.name) for column in columns_of("decisions") if column.name not in own
    }


def _ion_columns(prefix: str, ion: IonAbundance) -> dict[str, Any]:
    return {f"{prefix}_{name}": value for name, value in vars(ion).items() if name != "ion"}


def _columnwise(kind: str, rows: Sequence[Mapping[str, Any]]) -> dict[str, list[Any]]:
    return {column.name: [row[column.name] for row in rows] for column in columns_of(kind)}


def _typed(column: Column, values: Any) -> np.ndarray:
    dtype = {TEXT: str, REAL: np.float64, COUNT: np.int64, FLAG: bool}[column.dtype]
    if column.dtype == TEXT and len(values) == 0:
        return np.empty(0, dtype="U1")
    array = np.asarray(values, dtype=dtype)
    if column.shape and len(values):  # ECSV cannot hold a shaped column without rows
        array = array.reshape((len(values), *column.shape))
    return array


def _blank(column: Column) -> Any:
    return {TEXT: "", REAL: np.full(column.shape, np.nan) if column.shape else np.nan, COUNT: 0, FLAG: False}[
        column.dtype
    ]


def _sigmas(covariance: np.ndarray) -> np.ndarray:
    diagonal = np.diag(covariance)
    return np.sqrt(np.where(diagonal >= 0, diagonal, np.nan))


def _words(error: OSError) -> str:
    if error.errno == errno.ENOSPC:
        return "the disk is full"
    if error.errno in (errno.EACCES, errno.EPERM, errno.EROFS):
        return "no permission"
    return (error.strerror or str(error)).lower()


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask
