"""Compute first-order responses with the full engine: new opacity tables, atmospheres and line formation.

python -m specsolve.grid.perturbations_build --output specsolve/data/perturbations --work FOLDER

About 10 minutes on one core; tables and atmospheres that are in FOLDER already are not computed again.
"""

from __future__ import annotations

import argparse
import sys
from dataclasses import replace
from functools import lru_cache
from pathlib import Path

import numpy as np

from specsolve.atmosphere.blanketing import Blanketing, load_blanketing, save_blanketing, table_path
from specsolve.atmosphere.blanketing_build import build
from specsolve.atmosphere.build import part_bytes, read_part
from specsolve.atmosphere.model import Atmosphere
from specsolve.atmosphere.store import AtmosphereStore
from specsolve.atmosphere.structure import solve_structure
from specsolve.durable import write_atomically
from specsolve.grid.engine import lte_engine
from specsolve.grid.perturbations import ALPHA, FILE_NAME, MISSING_OPACITY, write_perturbations
from specsolve.grid.store import ResponseGrid
from specsolve.matter.composition import alpha_law, composition_for

ALPHA_STEP = 0.2  # dex
POWER_STEP = 1.0
SHARES = (1.0, 0.5, 0.25)  # of a step, where the whole one does not converge
LOGG_STEP = 0.5
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


def between(first: Blanketing, second: Blanketing, share: float) -> Blanketing:
    """Opacity table that lies `share` of the way from the first to the second, in the logarithm."""
    log_opacity = first.log_opacity + np.float32(share) * (second.log_opacity - first.log_opacity)
    return replace(first, log_opacity=log_opacity)


def changed(original: Atmosphere, name: str, work: Path) -> tuple[Atmosphere, float] | None:
    """The atmosphere of a node converged anew after a step of a perturbation, and the step; kept in a folder.

    Beside the limit of radiation pressure the whole step may not converge: then half or a quarter of it is taken.
    None if none converges.
    """
    teff, logg, mh = original.teff, original.logg, original.mh
    for share in SHARES:
        path = work / f"{name}_{share:g}_{teff:g}_{logg:g}_{mh:+g}.npz"
        model = read_part(path)
        if model is None:
            composition, table, power = composition_for(mh), _packaged_table(mh), 1.0
            if name == ALPHA:
                alpha = alpha_law(mh) + ALPHA_STEP
                table = between(table, _alpha_table(mh, alpha, work), share)
                composition = composition_for(mh, alpha_law(mh) + share * ALPHA_STEP)
            else:
                power += share * POWER_STEP
            model = solve_structure(teff, logg, composition, table, start=original, power=power)
            write_atomically(path, part_bytes(model))
        if model.status == "converged":
            return model, share * (ALPHA_STEP if name == ALPHA else POWER_STEP)
    return None


_packaged_table = lru_cache(maxsize=1)(load_blanketing)
_alpha_table = lru_cache(maxsize=1)(alpha_table)


def responses(
    grid: ResponseGrid, store: AtmosphereStore, work: Path, name: str
) -> tuple[list[tuple[float, float, float]], np.ndarray]:
    """Nodes, and the responses of all lines there, shape (n_nodes, n_lines, n_vmic, n_dA).

    A node that converges at no step is left out, and the one above it in gravity taken.
    """
    widths = lte_engine().widths
    axes = (np.array(VMIC), np.array(DA))
    found: dict[tuple[float, float, float], np.ndarray] = {}
    waiting = coarse_nodes(store)
    while waiting:
        teff, logg, mh = node = waiting.pop(0)
        original = store.get(*node)
        moved = changed(original, name, work)
        if moved is None:
            denser = (teff, logg + LOGG_STEP, mh)
            print(f"{name}: {node} does not converge, {denser} instead", file=sys.stderr)
            if denser not in found and denser not in waiting:
                waiting.insert(0, denser)
            continue
        model, step = moved
        found[node] = (widths(model, grid.lines, *axes) - widths(original, grid.lines, *axes)) / step
        print(f"{name}: {len(found)} done, {len(waiting)} to go", file=sys.stderr, flush=True)
    return list(found), np.array(list(found.values()))


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
    nodes, found = {}, {}
    for name in (ALPHA, MISSING_OPACITY):
        nodes[name], found[name] = responses(grid, store, options.work, name)
    header = {
        "nodes": {name: [list(node) for node in of_one] for name, of_one in nodes.items()},
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
