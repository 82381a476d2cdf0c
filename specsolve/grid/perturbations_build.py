"""Compute first-order responses with the full engine: new opacity tables, atmospheres and line formation.

python -m specsolve.grid.perturbations_build --output specsolve/data/perturbations --work FOLDER

About 10 minutes on one core; tables and atmospheres that are in FOLDER already are not computed again.
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

import numpy as np

from specsolve.atmosphere.blanketing import Blanketing, load_blanketing, save_blanketing, table_path
from specsolve.atmosphere.blanketing_build import build
from specsolve.atmosphere.build import part_bytes, read_part
from specsolve.atmosphere.model import Atmosphere
from specsolve.atmosphere.store import AtmosphereStore
from specsolve.atmosphere.structure import solve_structure
from specsolve.durable import write_atomically
from specsolve.errors import SpecsolveError
from specsolve.grid.engine import lte_engine
from specsolve.grid.perturbations import ALPHA, FILE_NAME, MISSING_OPACITY, write_perturbations
from specsolve.grid.store import ResponseGrid
from specsolve.matter.composition import Composition, alpha_law, composition_for

ALPHA_STEP = 0.2  # dex
POWER_STEP = 1.0
TEFF = np.arange(4000.0, 7000.1, 500.0)
MIDDLE_LOGG = (1.5, 3.0, 4.0)  # besides the lowest and the highest that the atmospheres have
MH = (-3.0, -2.0, -1.0, -0.5, 0.0, 0.5)
VMIC = (0.0, 1.5, 3.5)
DA = (-1.4, -0.7, 0.0, 0.7, 1.4)


def coarse_nodes(store: AtmosphereStore) -> list[tuple[float, float, float]]:
    """Nodes (teff, logg, mh) of the atmospheres at which the responses are computed; their hull holds all others."""
    nodes = []
    for mh in MH:
        for teff in TEFF:
            have = [float(g) for g in store.axes["logg"] if store.has(teff, g, mh)]
            chosen = {have[0], have[-1], *(g for g in MIDDLE_LOGG if have[0] < g < have[-1])}
            nodes += [(float(teff), logg, mh) for logg in sorted(chosen)]
    return nodes


def alpha_table(mh: float, alpha: float, work: Path) -> Blanketing:
    """Opacity table of a metallicity and [alpha/Fe], kept in a folder."""
    folder = work / f"alpha_{alpha:+.4f}"
    folder.mkdir(parents=True, exist_ok=True)
    path = table_path(mh, folder)
    if not path.exists():
        aside = path.with_name("aside.npz")
        save_blanketing(build(mh, alpha=alpha), aside)
        aside.rename(path)
    return load_blanketing(mh, folder)


def changed(
    original: Atmosphere, composition: Composition, table: Blanketing, power: float, work: Path, name: str
) -> Atmosphere:
    """The atmosphere of a node converged anew with another composition or multiplier, kept in a folder."""
    path = work / f"{name}_{original.teff:g}_{original.logg:g}_{original.mh:+g}.npz"
    model = read_part(path)
    if model is None:
        model = solve_structure(original.teff, original.logg, composition, table, start=original, power=power)
        write_atomically(path, part_bytes(model))
    if model.status != "converged":
        print(f"{path.name}: {model.reason}", file=sys.stderr)
    return model


def responses(grid: ResponseGrid, store: AtmosphereStore, work: Path) -> tuple[list, dict[str, np.ndarray]]:
    """Nodes, and the responses of all lines there.

    Raises
    ------
    SpecsolveError
        If more than a few atmospheres do not converge.
    """
    widths = lte_engine().widths
    axes = (np.array(VMIC), np.array(DA))
    nodes, found = [], {ALPHA: [], MISSING_OPACITY: []}
    wanted = coarse_nodes(store)
    for teff, logg, mh in wanted:
        original = store.get(teff, logg, mh)
        alpha = alpha_law(mh) + ALPHA_STEP
        richer = changed(original, composition_for(mh, alpha), alpha_table(mh, alpha, work), 1.0, work, ALPHA)
        thicker = changed(
            original, composition_for(mh), load_blanketing(mh), 1.0 + POWER_STEP, work, MISSING_OPACITY
        )  # fmt: skip
        if "failed" in (richer.status, thicker.status):
            continue
        base = widths(original, grid.lines, *axes)
        nodes.append((teff, logg, mh))
        found[ALPHA].append((widths(richer, grid.lines, *axes) - base) / ALPHA_STEP)
        found[MISSING_OPACITY].append((widths(thicker, grid.lines, *axes) - base) / POWER_STEP)
        print(f"{len(nodes)}/{len(wanted)}", file=sys.stderr, flush=True)
    if len(nodes) < 0.95 * len(wanted):
        raise SpecsolveError(f"only {len(nodes)} of {len(wanted)} atmospheres converged")
    return nodes, {name: np.array(values) for name, values in found.items()}


def main(arguments: list[str] | None = None) -> None:
    """Command line of the module."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--output", type=Path, required=True, help="folder of the result, for example that of the grid")
    parser.add_argument("--work", type=Path, required=True, help="folder for tables and atmospheres")
    parser.add_argument("--grid", type=Path, help="the packaged grid by default")
    options = parser.parse_args(arguments)
    options.work.mkdir(parents=True, exist_ok=True)
    options.output.mkdir(parents=True, exist_ok=True)
    grid = ResponseGrid.packaged() if options.grid is None else ResponseGrid.open(options.grid)
    store = AtmosphereStore.packaged()
    if store.identity != grid.atmospheres_identity:
        raise SystemExit("the grid was made on other atmospheres than the packaged ones")
    nodes, found = responses(grid, store, options.work)
    header = {
        "nodes": [list(node) for node in nodes],
        "vmic": list(VMIC),
        "dA": list(DA),
        "lines": grid.lines.key.tolist(),
        "atmospheres_identity": store.identity,
        "steps": {ALPHA: ALPHA_STEP, MISSING_OPACITY: POWER_STEP},
        "units": {"node": ["K", "dex(cm / s2)", "dex"], "vmic": "km / s", "dA": "dex", "response": "dex per unit"},
    }
    write_perturbations(options.output / FILE_NAME, header, found)


if __name__ == "__main__":
    main()
