"""Reading a user's own atmospheres: one ECSV table each, node parameters in its metadata."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np

from specsolve.atmosphere.channels import REFERENCE_WAVELENGTH_CM
from specsolve.atmosphere.energy import optical_depth
from specsolve.atmosphere.model import Atmosphere
from specsolve.atmosphere.start import STANDARD_LOG_TAU
from specsolve.atmosphere.store import AtmosphereStore, write_store
from specsolve.errors import ColumnError, InputError, UnitError
from specsolve.matter.composition import alpha_law, composition_for
from specsolve.matter.continuum import continuum_opacity
from specsolve.matter.equation_of_state import equilibrium

COLUMN_UNITS = {
    "column_mass": "g / cm2",
    "temperature": "K",
    "gas_pressure": "dyn / cm2",
    "electron_number_density": "1 / cm3",
}
MIN_DEPTHS = 20
HYDROSTATIC_TOLERANCE = 0.2  # |P / (g m) - 1| at the lowest point; radiation and turbulence may take that much
TEMPERATURE_RANGE_K = (2000.0, 30000.0)


def read_atmosphere(path: str | Path) -> Atmosphere:
    """Read one structure.

    Parameters
    ----------
    path : path
        ECSV with metadata `teff` [K], `logg` [dex cgs], `mh` [dex] (optional `alpha` [dex], `vmic` [km/s]) and the
        columns of `COLUMN_UNITS`, with units.

    Returns
    -------
    Atmosphere
        Status "imported"; the optical depths are computed with specsolve's continuum opacity; depth points are
        those of the table.

    Raises
    ------
    InputError
        The file cannot be read, metadata is missing, or the numbers are no atmosphere.
    ColumnError, UnitError
        A column is missing, or has no usable unit.
    """
    from astropy.table import QTable

    path = Path(path)
    try:
        table = QTable.read(path, format="ascii.ecsv")
    except Exception as problem:  # astropy raises many kinds for a broken file
        raise InputError(f"{path}: not a readable ECSV table ({problem}).", path=path) from problem
    meta = {str(k).lower(): v for k, v in table.meta.items()}
    try:
        teff, logg, mh = (float(meta[name]) for name in ("teff", "logg", "mh"))
    except (KeyError, TypeError, ValueError) as problem:
        raise InputError(
            f"{path}: the metadata must give teff [K], logg [dex cgs] and mh [dex] as numbers; it has {sorted(meta)}.",
            path=path,
        ) from problem
    columns = {}
    for name, unit in COLUMN_UNITS.items():
        if name not in table.colnames:
            raise ColumnError(
                f"{path}: column {name} is missing; needed are {', '.join(COLUMN_UNITS)}.",
                column=name, found=tuple(table.colnames), path=path,
            )  # fmt: skip
        if getattr(table[name], "unit", None) is None:
            raise UnitError(f"{path}: column {name} has no unit; write one that converts to {unit}.",
                            column=name, unit=None, expected=unit, path=path)  # fmt: skip
        try:
            columns[name] = np.asarray(table[name].to_value(unit), dtype=float)
        except Exception as problem:
            raise UnitError(f"{path}: column {name} is in {table[name].unit}, which does not convert to {unit}.",
                            column=name, unit=str(table[name].unit), expected=unit, path=path) from problem  # fmt: skip
    _check(path, columns, 10.0**logg)
    alpha = float(meta.get("alpha", alpha_law(mh)))
    gas = equilibrium(columns["temperature"], columns["gas_pressure"], composition_for(mh, alpha))
    absorption, scattering = continuum_opacity(np.array([REFERENCE_WAVELENGTH_CM]), gas)
    tau = optical_depth(absorption[0] + scattering[0], columns["column_mass"])
    if tau[-1] < 10.0:
        raise InputError(
            f"{path}: the lowest point has optical depth {tau[-1]:.2g} at 5000 A; at least 10 is needed.", path=path
        )
    return Atmosphere(
        teff=teff, logg=logg, mh=mh, alpha=alpha, vmic=float(meta.get("vmic", np.nan)),
        column_mass=columns["column_mass"], temperature=columns["temperature"], gas_pressure=columns["gas_pressure"],
        electron_density=columns["electron_number_density"], log_tau=np.log10(tau), flux_error=float("nan"),
        status="imported",
    )  # fmt: skip


def _check(path: Path, columns: dict[str, np.ndarray], gravity: float) -> None:
    for name, values in columns.items():
        bad = np.flatnonzero(~np.isfinite(values) | (values <= 0.0))
        if bad.size:
            raise InputError(
                f"{path}: {name} is not a positive number in row {bad[0] + 1}.", path=path, row=int(bad[0])
            )
    mass, temperature, pressure = columns["column_mass"], columns["temperature"], columns["gas_pressure"]
    if len(mass) < MIN_DEPTHS:
        raise InputError(f"{path}: {len(mass)} depth points; at least {MIN_DEPTHS} are needed.", path=path)
    if np.any(np.diff(mass) <= 0.0):
        row = int(np.flatnonzero(np.diff(mass) <= 0.0)[0]) + 1
        raise InputError(
            f"{path}: column_mass must increase inwards; it does not in row {row + 1}.", path=path, row=row
        )
    low, high = TEMPERATURE_RANGE_K
    if temperature.min() < low or temperature.max() > high:
        raise InputError(
            f"{path}: temperatures {temperature.min():.0f} to {temperature.max():.0f} K; allowed {low:.0f} to {high:.0f} K.",
            path=path,
        )
    ratio = pressure[-1] / (gravity * mass[-1])
    if abs(ratio - 1.0) > HYDROSTATIC_TOLERANCE:
        raise InputError(
            f"{path}: gas pressure over g m is {ratio:.2f} at the lowest point; hydrostatic equilibrium wants about 1 "
            "(is logg right, are the units?).", path=path
        )  # fmt: skip


def _same_depths(model: Atmosphere, n: int) -> Atmosphere:
    """Resample to n points in log tau, so that all structures of a store have one length."""
    from dataclasses import replace

    from scipy.interpolate import PchipInterpolator

    x = np.linspace(max(model.log_tau[0], STANDARD_LOG_TAU[0]), min(model.log_tau[-1], STANDARD_LOG_TAU[-1]), n)
    moved = {
        name: np.exp(PchipInterpolator(model.log_tau, np.log(getattr(model, name)))(x))
        for name in ("column_mass", "temperature", "gas_pressure", "electron_density")
    }
    return replace(model, log_tau=x, **moved)


def import_store(
    directory: str | Path, tables: Sequence[str | Path], provenance: dict | None = None
) -> AtmosphereStore:
    """Make a store out of a user's tables.

    Parameters
    ----------
    directory : path
    tables : sequence of path
    provenance : dict, optional

    Returns
    -------
    AtmosphereStore
        Axes are the values found; combinations without a table are left out. Structures with different numbers of
        depth points are resampled in log tau to the standard number.

    Raises
    ------
    InputError
        No table, a table that is no atmosphere, or two of the same node.
    """
    models: dict[tuple[float, float, float], Atmosphere] = {}
    origin: dict[tuple[float, float, float], Path] = {}
    for path in tables:
        model = read_atmosphere(path)
        node = (model.teff, model.logg, model.mh)
        if node in models:
            raise InputError(
                f"{path} and {origin[node]} are both Teff {node[0]:g}, log g {node[1]:g}, [M/H] {node[2]:+g}.",
                path=path,
            )
        models[node], origin[node] = model, Path(path)
    if not models:
        raise InputError("no tables were given; write `specsolve atmosphere import TABLE... --output DIR`.")
    lengths = {len(m.column_mass) for m in models.values()}
    if len(lengths) > 1:
        models = {node: _same_depths(m, len(STANDARD_LOG_TAU)) for node, m in models.items()}
    axes = {name: np.unique([node[i] for node in models]) for i, name in enumerate(("teff", "logg", "mh"))}
    return write_store(directory, axes, models, {"origin": "imported", **(provenance or {})})
