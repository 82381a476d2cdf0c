"""``specsolve atmosphere``: build, show and import model atmospheres."""

from __future__ import annotations

import json
from pathlib import Path

import click

from specsolve.cli.settings import Settings, common_options


@click.group()
def atmosphere() -> None:
    """Build, show and import model atmospheres."""


@atmosphere.command(
    epilog="Examples: specsolve atmosphere build --output my_atmospheres --teff 5000:6000:250 --logg 4:5:0.5 --mh 0. "
    "An interrupted build goes on when the same command is given again."
)
@click.option(
    "--output",
    "directory",
    type=click.Path(path_type=Path, file_okay=False),
    required=True,
    help="Folder of the new store.",
)
@click.option("--teff", help="Nodes in K: START:STOP:STEP, A,B,C or one number. Default 4000:7000:250.")
@click.option("--logg", help="Nodes in dex. Default 0:5:0.5 (below 0.5 only up to 5000 K).")
@click.option("--mh", help="Nodes in dex. Default -3:0.5:0.5.")
@click.option("--multiplier-power", type=click.FloatRange(0.0, 2.0), default=1.0, show_default=True,
              help="Exponent of the missing-opacity multiplier: 0 raw line lists, 2 twice its logarithm.")  # fmt: skip
@click.option(
    "--workers", type=click.IntRange(1), default=1, show_default=True, help="Processes; one metallicity each at a time."
)
@common_options(json=False)
def build(
    settings: Settings,
    directory: Path,
    teff: str | None,
    logg: str | None,
    mh: str | None,
    multiplier_power: float,
    workers: int,
) -> None:
    """Converge atmospheres on a set of nodes and store them."""
    from specsolve.atmosphere.build import DEFAULT_LOGG, DEFAULT_MH, DEFAULT_TEFF, build_store
    from specsolve.cli.progress import counting
    from specsolve.grid.axes import parse_axis_subset
    from specsolve.provenance import collect

    axes = {
        name: default if text is None else tuple(parse_axis_subset(text))
        for name, text, default in (("teff", teff, DEFAULT_TEFF), ("logg", logg, DEFAULT_LOGG), ("mh", mh, DEFAULT_MH))
    }
    with counting("atmospheres", quiet=settings.verbosity < 0) as progress:
        store = build_store(directory, **axes, power=multiplier_power, workers=workers, progress=progress,
                            provenance={"provenance": collect()})  # fmt: skip
    _summary(settings, store)


@atmosphere.command(name="import", epilog="Example: specsolve atmosphere import mine/*.ecsv --output my_atmospheres")
@click.argument("tables", nargs=-1, required=True, type=click.Path(path_type=Path, dir_okay=False))
@click.option(
    "--output",
    "directory",
    type=click.Path(path_type=Path, file_okay=False),
    required=True,
    help="Folder of the new store.",
)
@common_options(json=False)
def import_(settings: Settings, tables: tuple[Path, ...], directory: Path) -> None:
    """Make a store out of your own structures.

    Each ECSV table has teff, logg and mh in its metadata and the columns column_mass, temperature, gas_pressure,
    electron_number_density, with units.
    """
    from specsolve.atmosphere.importing import import_store
    from specsolve.provenance import collect

    store = import_store(directory, tables, {"provenance": collect(inputs=tables)})
    _summary(settings, store)


@atmosphere.command(
    context_settings={"ignore_unknown_options": True},  # so that -1 is a metallicity
    epilog="Examples: specsolve atmosphere show 5750 4.5 0 ; ... --plot sun.png ; ... --output sun.ecsv",
)
@click.argument("teff", type=float)
@click.argument("logg", type=float)
@click.argument("mh", type=float)
@click.option(
    "--atmospheres",
    type=click.Path(path_type=Path, file_okay=False),
    help="A store of your own; default the packaged one.",
)
@click.option("--output", type=click.Path(path_type=Path, dir_okay=False), help="Write the table as ECSV.")
@click.option(
    "--plot",
    type=click.Path(path_type=Path, dir_okay=False),
    help="Draw temperature and pressures against optical depth.",
)
@common_options()
def show(
    settings: Settings,
    teff: float,
    logg: float,
    mh: float,
    atmospheres: Path | None,
    output: Path | None,
    plot: Path | None,
) -> None:
    """Print one atmosphere of a store as a table."""
    from specsolve.atmosphere.store import AtmosphereStore
    from specsolve.report.atmosphere import draw_atmosphere, structure_table

    store = AtmosphereStore.packaged() if atmospheres is None else AtmosphereStore.open(atmospheres)
    model = store.get(teff, logg, mh)
    table = structure_table(model, store.identity)
    if output is not None:
        table.write(output, format="ascii.ecsv", overwrite=True)
        settings.say(f"wrote {output}")
    if plot is not None:
        draw_atmosphere(model, plot)
        settings.say(f"wrote {plot}")
    if settings.json:
        columns = {name: [float(v) for v in table[name].value] for name in table.colnames}
        click.echo(json.dumps({"schema": 1, **{k: table.meta[k] for k in table.meta}, "columns": columns}, indent=1))
    elif output is None and plot is None:
        click.echo(
            f"Teff {teff:g} K  log g {logg:g}  [M/H] {mh:+g}  [alpha/Fe] {model.alpha:+.2f}  {model.status}, "
            f"largest flux error {model.flux_error:.1e}"
        )
        click.echo("\n".join(table.pformat(max_lines=-1, max_width=-1)))


def _summary(settings: Settings, store: object) -> None:
    nodes = store.header["nodes"]
    good = sum(n["status"] in ("converged", "imported") for n in nodes)
    failed = [n for n in nodes if n["status"] == "failed"]
    settings.say(
        f"{store.directory}: {good} atmospheres, {len(failed)} failed, {len(nodes) - good - len(failed)} left out"
    )
    for reason in sorted({n["reason"] for n in failed}):
        settings.say(f"  failed {sum(n['reason'] == reason for n in failed)}: {reason}")
