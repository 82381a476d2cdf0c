"""Tables that a solve writes only where they were asked for: joint samples, and the map of the objective."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from specsolve.report.tables import make_table, output_paths, write_table
from specsolve.schema import EXTRA_ENDINGS, PARAMETERS, columns_of

if TYPE_CHECKING:
    from astropy.table import Table

    from specsolve.balance.solution import Solution

ON_LATTICE = ("objective", "feh", "vmic", "excitation_slope", "ionization_offset")


def samples_table(solutions: Sequence[Solution], provenance: Mapping[str, Any] | None = None) -> Table:
    """Samples of all stars that have some, one below the other."""
    parts = []
    for one in solutions:
        if one.samples is None:
            continue
        n = len(one.samples)
        columns = {
            **_names(one, n),
            "sample": np.arange(n),
            "candidate": one.samples.candidate,
            "log_density": one.samples.log_density,
        }
        columns |= {name: one.samples.parameters[:, i] for i, (name, _, _) in enumerate(PARAMETERS)}
        parts.append(columns)
    return _stacked("samples", parts, provenance)


def map_table(solutions: Sequence[Solution], provenance: Mapping[str, Any] | None = None) -> Table:
    """Points of the maps of all stars that have one; gravity runs fastest."""
    parts = []
    for one in solutions:
        chart = one.objective_map
        if chart is None:
            continue
        teff, logg = np.meshgrid(chart.teff, chart.logg, indexing="ij")
        columns = {**_names(one, teff.size), "teff": teff.ravel(), "logg": logg.ravel()}
        parts.append(columns | {name: getattr(chart, name).ravel() for name in ON_LATTICE})
    return _stacked("map", parts, provenance)


def write_extras(
    solutions: Sequence[Solution], output: str | Path, provenance: Mapping[str, Any] | None = None
) -> dict[str, Path]:
    """Write ``X_samples.ecsv`` and ``X_map.ecsv`` where there is something to write; their paths by kind."""
    master = output_paths(output)["stars"]
    made = {}
    for kind, table in (("samples", samples_table), ("map", map_table)):
        found = table(solutions, provenance)
        if len(found):
            made[kind] = write_table(found, master.with_name(f"{master.stem}{EXTRA_ENDINGS[kind]}.ecsv"))
    return made


def _names(one: Solution, number: int) -> dict[str, np.ndarray]:
    return {"star": np.full(number, one.star), "treatment": np.full(number, one.treatment)}


def _stacked(kind: str, parts: list[dict[str, np.ndarray]], provenance: Mapping[str, Any] | None) -> Table:
    joined = {c.name: np.concatenate([part[c.name] for part in parts]) if parts else [] for c in columns_of(kind)}
    return make_table(kind, joined, provenance)
