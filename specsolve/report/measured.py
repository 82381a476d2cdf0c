"""Measured spectra as tables and JSON: ``X.ecsv`` (line by line, read by solve) and ``X_spectra.ecsv`` (one row each)."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.report.tables import make_table, plain, write_table
from specsolve.schema import SCHEMA, columns_of
from specsolve.spectrum.types import FLAG_NOT_COVERED, FLAG_UPPER_LIMIT, FLAG_WORDS, words_of_flags

if TYPE_CHECKING:
    from astropy.table import Table

    from specsolve.measuring import Measured

SPECTRA_ENDING = "_spectra"
MEASURED, FAILED = "measured", "failed"


def line_rows(one: Measured) -> dict[str, np.ndarray]:
    """The rows of one spectrum in the table of widths, as columns: the lines that it covers; empty if it failed."""
    found = one.measurements
    names = [column.name for column in columns_of("measurements")]
    if found is None:
        return {name: np.empty(0) for name in names}
    special = {
        "star": np.full(len(found), one.star),
        "flags": np.array([words_of_flags(bits) for bits in found.flags.tolist()], dtype=str),
        "reduced_chi2": found.chi2,
    }
    covered = (found.flags & FLAG_NOT_COVERED) == 0
    return {name: (special[name] if name in special else np.asarray(getattr(found, name)))[covered] for name in names}


def spectrum_row(one: Measured) -> dict[str, Any]:
    """The row of one spectrum in ``X_spectra.ecsv``."""
    nan = float("nan")
    row: dict[str, Any] = {
        "star": one.star,
        "file": Path(one.path).name,
        "status": FAILED if one.error else MEASURED,
        "reason": str(one.error) if one.error else "",
        "notes": ". ".join(one.notes),
        "guess_source": one.guess_source,
        "guess_teff": one.guess.teff,
        "guess_logg": one.guess.logg,
        "guess_feh": one.guess.mh,
        "guess_vmic": one.guess.vmic,
    }
    spectrum, velocity, found = one.spectrum, one.velocity, one.measurements
    if velocity is not None:
        row |= {
            "velocity": velocity.value,
            "velocity_error": velocity.error,
            "velocity_significance": velocity.significance,
            "barycentric_correction": velocity.barycentric,
            "vacuum_share": velocity.vacuum_share,
            "vacuum_share_error": velocity.vacuum_share_error,
        }
    if spectrum is not None:
        row |= {
            "air_or_vacuum": spectrum.air_source,
            "signal_to_noise": spectrum.signal_to_noise,
            "noise_source": spectrum.sigma_source,
            "resolving_power": spectrum.resolving_power,
            "n_orders": spectrum.n_orders,
        }
    if found is not None:
        row |= {
            "broadening": found.broadening,
            "broadening_error": found.broadening_error,
            "rotation": found.rotation,
            "n_lines": len(found),
            "n_measured": int(np.isfinite(found.equivalent_width).sum()),
            "n_use": int(found.use.sum()),
        }
    blank = {"float64": nan, "int64": 0, "str": "", "bool": False}
    return {column.name: row.get(column.name, blank[column.dtype]) for column in columns_of("spectra")}


def tables_of(measured: Sequence[Measured], provenance: Mapping[str, Any] | None = None) -> dict[str, Table]:
    """Both tables; keys "measurements" and "spectra"."""
    parts = [line_rows(one) for one in measured if one.measurements is not None]
    names = [column.name for column in columns_of("measurements")]
    columns = {name: np.concatenate([part[name] for part in parts]) if parts else [] for name in names}
    rows = [spectrum_row(one) for one in measured]
    by_name = {column.name: [row[column.name] for row in rows] for column in columns_of("spectra")}
    return {
        "measurements": make_table("measurements", columns, provenance),
        "spectra": make_table("spectra", by_name, provenance),
    }


def output_paths(output: str | Path) -> dict[str, Path]:
    """The two file names of an ``--output``; a trailing ``.ecsv`` is understood.

    Examples
    --------
    >>> [str(path) for path in output_paths("run/widths.ecsv").values()]
    ['run/widths.ecsv', 'run/widths_spectra.ecsv']
    """
    path = Path(output)
    stem = path.name.removesuffix(".ecsv")
    return {
        "measurements": path.parent / f"{stem}.ecsv",
        "spectra": path.parent / f"{stem}{SPECTRA_ENDING}.ecsv",
    }


def write(measured: Sequence[Measured], output: str | Path, provenance: Mapping[str, Any] | None = None) -> list[Path]:
    """Write both tables; each appears whole or not at all."""
    tables = tables_of(measured, provenance)
    return [write_table(tables[kind], path) for kind, path in output_paths(output).items()]


def to_json(measured: Sequence[Measured], provenance: Mapping[str, Any] | None = None) -> dict[str, Any]:
    """The same content ready for JSON: schema, provenance, spectra with their lines; undefined numbers are null."""
    spectra = []
    for one in measured:
        columns = {name: plain(values) for name, values in line_rows(one).items()}
        row = plain(spectrum_row(one))
        row["lines"] = [dict(zip(columns, values, strict=True)) for values in zip(*columns.values(), strict=True)]
        spectra.append(row)
    return {"schema": SCHEMA, "provenance": plain(provenance or {}), "spectra": spectra}


def summary(one: Measured) -> list[str]:
    """What a person wants to know of one spectrum, as lines of text."""
    if one.error is not None or one.measurements is None or one.velocity is None or one.spectrum is None:
        return [f"{one.star}: failed: {one.error}"]
    row, found = spectrum_row(one), one.measurements
    velocity = f"velocity {row['velocity']:+.2f}"
    if np.isfinite(row["velocity_error"]):
        velocity += f" +- {row['velocity_error']:.2f} km/s ({row['velocity_significance']:.0f} sigma)"
    else:
        velocity += " km/s (said)"
    if np.isfinite(row["barycentric_correction"]):
        velocity += f", {row['velocity'] + row['barycentric_correction']:+.2f} km/s at the barycentre"
    width = f"lines broadened by {row['broadening']:.1f} km/s" if np.isfinite(row["broadening"]) else ""
    if np.isfinite(row["rotation"]) and row["rotation"] > 0.0:
        width += f" and rotation {row['rotation']:.1f} km/s"
    limits = int(np.count_nonzero(found.flags & FLAG_UPPER_LIMIT))
    counts = Counter(word for bits in found.flags.tolist() for word in words_of_flags(bits).split(",") if word and bits)
    order = list(FLAG_WORDS.values())
    flags = ", ".join(f"{counts[word]} {word.replace('_', ' ')}" for word in order if counts[word])
    guess = (
        f"predicted for teff {one.guess.teff:.0f}, logg {one.guess.logg:.2f}, [Fe/H] {one.guess.mh:+.2f}, "
        f"vmic {one.guess.vmic:.2f} ({one.guess_source})"
    )
    text = [
        f"{one.star}: {velocity}; S/N {row['signal_to_noise']:.0f} a pixel ({row['noise_source']}); {width}",
        f"  {row['n_lines']} lines: {row['n_use']} to use, {limits} upper limits; {guess}",
    ]
    if flags:
        text.append(f"  flags: {flags}")
    return text + [f"  {note}" for note in one.notes]
