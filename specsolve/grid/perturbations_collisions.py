"""Add the response to hydrogen collisions to stored first-order responses: d log10(W/lambda) / d log10 S_H in NLTE.

python -m specsolve.grid.perturbations_collisions specsolve/data/perturbations/perturbations.npz --workers 2

At the nodes of the other responses (`perturbations_build.coarse_nodes`) the departures are solved anew with S_H x 3, starting
from those of the packaged store: about 10 minutes on one core.
"""

from __future__ import annotations

import argparse
import sys
from dataclasses import replace
from functools import lru_cache
from pathlib import Path

import numpy as np

from specsolve.atmosphere.store import AtmosphereStore
from specsolve.constants import SOLAR_IRON
from specsolve.grid.build import own_pool
from specsolve.grid.perturbations import Perturbations, read_perturbations, write_perturbations
from specsolve.grid.perturbations_build import DA, VMIC, coarse_nodes
from specsolve.grid.store import ResponseGrid

HYDROGEN_COLLISIONS = "hydrogen_collisions"
FACTOR = 3.0
#: Larger responses [dex] are those of widths near zero: a line that is about to vanish into emission. They are written as
#: zero, as are those of lines in emission, which a grid does not hold.
LARGEST = 3.0


@lru_cache(maxsize=1)
def _stores():
    from specsolve.nlte.departures import DepartureStore

    return AtmosphereStore.packaged(), DepartureStore.packaged(), ResponseGrid.packaged().lines


def response(node: tuple[float, float, float]) -> np.ndarray | None:
    """R at a node, shape (n_lines, n_vmic, n_dA); None where there are no departures. The task of a worker."""
    from specsolve.formation.equivalent_width import reduced_widths
    from specsolve.matter.composition import composition_for
    from specsolve.nlte.departures import LineDepartures, at_depths
    from specsolve.nlte.departures_build import solve_node
    from specsolve.nlte.line_levels import line_levels
    from specsolve.nlte.recipe import Recipe

    atmospheres, departures, lines = _stores()
    if departures.unavailable(*node):
        return None
    atmosphere, usual = atmospheres.get(*node), departures.log_b(*node)
    recipe = Recipe()
    strong = replace(recipe, hydrogen_factor=recipe.hydrogen_factor * FACTOR)
    found = solve_node(atmosphere, strong, departures.size, usual)
    if not found.converged:
        return None
    levels, composition = line_levels(lines, departures.size), composition_for(atmosphere.mh, atmosphere.alpha)
    widths = [
        reduced_widths(
            atmosphere, composition, lines, VMIC, SOLAR_IRON + atmosphere.mh + np.array(DA),
            departures=LineDepartures(log_b, departures.depths, levels.lower, levels.upper),
        )
        for log_b in (usual, at_depths(found.log_b, found.log_tau))
    ]  # fmt: skip
    change = (widths[1] - widths[0]) / np.log10(FACTOR)
    return np.where(np.isfinite(change) & (np.abs(change) < LARGEST), change, 0.0)


def with_collisions(stored: Perturbations, nodes: list, found: list[np.ndarray]) -> tuple[dict, dict]:
    """Header and responses [dex per unit] of a store with the response to hydrogen collisions in it."""
    from specsolve.grid.perturbations import STEP

    responses = {name: values * STEP for name, values in stored.responses.items()}
    responses[HYDROGEN_COLLISIONS] = np.array(found)
    header = {key: value for key, value in stored.header.items() if key not in ("format", "schema")}
    header["nodes"] = {**header["nodes"], HYDROGEN_COLLISIONS: [list(node) for node in nodes]}
    header["steps"] = {**header["steps"], HYDROGEN_COLLISIONS: float(np.log10(FACTOR))}
    return header, responses


def main(arguments: list[str] | None = None) -> None:
    """Command line of the module."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("store", type=Path, help="file of responses of the packaged grid, to be completed")
    parser.add_argument("--workers", type=int, default=1)
    options = parser.parse_args(arguments)
    stored = read_perturbations(options.store)
    atmospheres, _, lines = _stores()
    if list(stored.keys) != lines.key.tolist() or stored.header["atmospheres_identity"] != atmospheres.identity:
        raise SystemExit(f"{options.store} does not belong to the packaged grid")
    nodes = coarse_nodes(atmospheres)
    with own_pool(options.workers) as pool:
        found = []
        for done, values in enumerate(pool.map(response, nodes)):
            found.append(values)
            print(f"{done + 1} of {len(nodes)} nodes", file=sys.stderr, flush=True)
    kept = [(node, values) for node, values in zip(nodes, found, strict=True) if values is not None]
    header, responses = with_collisions(stored, *map(list, zip(*kept, strict=True)))
    write_perturbations(options.store, header, responses)


if __name__ == "__main__":
    main()
