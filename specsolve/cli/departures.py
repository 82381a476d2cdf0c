"""``specsolve departures``: build and describe stores of departures from LTE."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import click
import numpy as np

from specsolve.cli.settings import Settings, common_options

FOLDER = click.Path(path_type=Path, file_okay=False)


@click.group()
def departures() -> None:
    """Build and describe departures from LTE: populations of the levels of Fe I and Fe II in model atmospheres."""


@departures.command(
    epilog="Examples: specsolve departures build --output my_departures --atmospheres my_atmospheres --workers 4. "
    "An interrupted build goes on when the same command is given again."
)
@click.option("--output", "directory", type=FOLDER, required=True, help="Folder of the new store.")
@click.option("--atmospheres", type=FOLDER, help="A store of your own; default the packaged one.")
@click.option("--teff", help="Nodes in K: START:STOP:STEP, A,B,C or one number. Default: all of the atmospheres.")
@click.option("--logg", help="Nodes in dex.")
@click.option("--mh", help="Nodes in dex.")
@click.option(
    "--hydrogen-factor", type=click.FloatRange(0.0), help="S_H on the classical rates of hydrogen collisions."
)
@click.option("--atom", "size", type=click.Choice(["151", "236", "297"]), default="236", show_default=True,
              help="Levels of the model atom.")  # fmt: skip
@click.option("--workers", type=click.IntRange(1), default=1, show_default=True, help="Processes.")
@common_options()
def build(
    settings: Settings,
    directory: Path,
    atmospheres: Path | None,
    teff: str | None,
    logg: str | None,
    mh: str | None,
    hydrogen_factor: float | None,
    size: str,
    workers: int,
) -> None:
    """Solve the statistical equilibrium of iron in all atmospheres of a store: 3 to 5 s each."""
    from specsolve.atmosphere.store import AtmosphereStore
    from specsolve.cli.progress import counting
    from specsolve.grid.axes import choose_nodes, parse_axis_subset
    from specsolve.nlte.departures import AXES
    from specsolve.nlte.departures_build import build_departures
    from specsolve.nlte.recipe import Recipe
    from specsolve.provenance import collect

    store = AtmosphereStore.packaged() if atmospheres is None else AtmosphereStore.open(atmospheres)
    chosen = []
    for name, text in zip(AXES, (teff, logg, mh), strict=True):
        axis = store.axes[name]
        values = axis if text is None else choose_nodes(name, axis, np.asarray(parse_axis_subset(text), float))
        chosen.append([int(np.argmin(np.abs(axis - value))) for value in values])
    nodes = [(i, j, k) for i in chosen[0] for j in chosen[1] for k in chosen[2]]
    recipe = Recipe() if hydrogen_factor is None else Recipe(hydrogen_factor=hydrogen_factor)
    with counting("departures", quiet=settings.verbosity < 0) as progress:
        made = build_departures(
            directory, atmospheres=store, nodes=nodes, recipe=recipe, size=int(size), workers=workers,
            progress=progress, provenance={"provenance": collect()},
        )  # fmt: skip
    _show(settings, made)


@departures.command()
@click.argument("directory", type=FOLDER, required=False)
@common_options()
def info(settings: Settings, directory: Path | None) -> None:
    """Describe the departures in DIRECTORY, or the packaged ones.

    \b
    Examples:
      specsolve departures info
      specsolve departures info my_departures --json
    """
    from specsolve.nlte.departures import DepartureStore

    _show(settings, DepartureStore.packaged() if directory is None else DepartureStore.open(directory))


def content_of(store: Any) -> dict[str, Any]:
    """A store of departures, for JSON."""
    nodes = store.header["nodes"]
    by_status = {
        status: sum(node["status"] == status for node in nodes) for status in ("converged", "failed", "left out")
    }
    iterations = [node["iterations"] for node in nodes if node["status"] == "converged"]
    return {
        "directory": str(store.directory),
        "identity": store.identity,
        "atmospheres_identity": store.atmospheres_identity,
        "axes": {name: values.tolist() for name, values in store.axes.items()},
        "depths": store.depths.tolist(),
        "atom": store.size,
        "recipe": store.header["recipe"],
        "nodes": by_status,
        "failed": [
            {"node": [float(store.axes[name][i]) for name, i in zip(store.axes, index, strict=True)],
             "reason": store.record(index)["reason"]}
            for index in np.ndindex(*(values.size for values in store.axes.values()))
            if store.record(index)["status"] == "failed"
        ],
        "iterations": {"median": float(np.median(iterations)), "most": max(iterations)} if iterations else None,
        "source": store.header["atom_source"],
    }  # fmt: skip


def _show(settings: Settings, store: Any) -> None:
    content = content_of(store)
    if settings.json:
        click.echo(json.dumps({"schema": 1, **content}, indent=1))
        return
    nodes, recipe = content["nodes"], content["recipe"]
    rows = [
        content["directory"],
        f"identity {content['identity']}",
        f"atmospheres {content['atmospheres_identity']}",
        f"model atom of {content['atom']} levels, ln b at {len(content['depths'])} depths",
        "recipe " + ", ".join(f"{name.replace('_', ' ')} {value:g}" for name, value in recipe.items()),
        *(f"{name:<5} " + " ".join(f"{v:g}" for v in values) for name, values in content["axes"].items()),
        f"{nodes['converged']} nodes converged, {nodes['failed']} failed, {nodes['left out']} left out",
    ]
    if content["iterations"]:
        rows.append(f"iterations: median {content['iterations']['median']:g}, most {content['iterations']['most']}")
    rows += [
        "  failed at " + " ".join(f"{v:g}" for v in bad["node"]) + f": {bad['reason']}" for bad in content["failed"]
    ]
    click.echo("\n".join([*rows, content["source"]]))
