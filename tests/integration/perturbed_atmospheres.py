"""Atmospheres of other [alpha/Fe] or missing-opacity multiplier, between the nodes that the stored responses rest on.

The truth that first-order responses are compared with: converged at the point with opacity tables of their own
composition. For [alpha/Fe], stars of `tests.integration.off_node` at two of its metallicities, 0.2 dex richer than the
law; for the multiplier, grid nodes that no response was computed at, with twice its logarithm.

``python -m tests.integration.perturbed_atmospheres --work FOLDER`` remakes ``tests/data/perturbed_atmospheres.npz``
(3 minutes on one core).
"""

from __future__ import annotations

import argparse
import sys
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np

from specsolve.atmosphere.blanketing import load_blanketing
from specsolve.atmosphere.model import Atmosphere
from specsolve.atmosphere.store import AtmosphereStore
from specsolve.atmosphere.structure import solve_structure
from specsolve.grid.perturbations import ALPHA, MISSING_OPACITY
from specsolve.grid.perturbations_build import ALPHA_STEP, POWER_STEP, alpha_table
from specsolve.matter.composition import alpha_law, composition_for
from tests.integration import off_node

DATA = Path(__file__).resolve().parents[1] / "data" / "perturbed_atmospheres.npz"
STARS_PER_MH = 12
NODES = tuple(
    (teff, logg, mh)
    for mh in (-2.5, -1.5, 0.0)
    for teff, logg in ((4750.0, 2.0), (5250.0, 3.5), (5750.0, 4.5), (6250.0, 3.5))
)
NAMES = (ALPHA, MISSING_OPACITY)


@dataclass(frozen=True)
class Perturbed:
    """One pair of atmospheres.

    Attributes
    ----------
    name : str
        Of the perturbation.
    step : float
    vmic : float
        Of the star's lines [km/s].
    original, changed : Atmosphere
    """

    name: str
    step: float
    vmic: float
    original: Atmosphere
    changed: Atmosphere


def originals() -> list[tuple[str, float, Atmosphere]]:
    """Name of the perturbation, vmic of the lines and the atmosphere before, of each pair."""
    stars = [item for item in off_node.load() if item.kind == off_node.RANDOM and item.model.status == "converged"]
    metallicities = sorted({item.model.mh for item in stars})
    found = []
    for mh in (metallicities[0], metallicities[3]):
        chosen = [item for item in stars if item.model.mh == mh][:STARS_PER_MH]
        found += [(ALPHA, item.vmic, item.model) for item in chosen]
    store = AtmosphereStore.packaged()
    return found + [(MISSING_OPACITY, 1.5, store.get(*node)) for node in NODES]


@lru_cache
def load() -> tuple[Perturbed, ...]:
    """The pairs of the data file whose changed atmosphere converged."""
    with np.load(DATA, allow_pickle=False) as stored:
        structures, good = stored["structures"].astype(float), stored["converged"]
    items = []
    for (name, vmic, original), structure, converged in zip(originals(), structures, good, strict=True):
        alpha = original.alpha + (ALPHA_STEP if name == ALPHA else 0.0)
        changed = Atmosphere(
            teff=original.teff,
            logg=original.logg,
            mh=original.mh,
            alpha=alpha,
            vmic=original.vmic,
            flux_error=0.0,
            status="converged" if converged else "failed",
            **dict(zip(off_node.STORED, structure, strict=True)),
        )
        if converged:
            items.append(Perturbed(name, ALPHA_STEP if name == ALPHA else POWER_STEP, vmic, original, changed))
    return tuple(items)


def main(arguments: list[str] | None = None) -> None:
    """Command line of the module."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--work", type=Path, required=True, help="folder for tables")
    parser.add_argument("--output", type=Path, default=DATA)
    options = parser.parse_args(arguments)
    structures, converged = [], []
    for name, _, original in originals():
        if name == ALPHA:
            alpha = alpha_law(original.mh) + ALPHA_STEP
            composition, table, power = (
                composition_for(original.mh, alpha),
                alpha_table(original.mh, alpha, options.work),
                1.0,
            )
        else:
            composition, table, power = composition_for(original.mh), load_blanketing(original.mh), 1.0 + POWER_STEP
        model = solve_structure(original.teff, original.logg, composition, table, start=original, power=power)
        print(name, original.teff, original.logg, original.mh, model.status, model.reason, file=sys.stderr, flush=True)
        converged.append(model.status == "converged")
        values = np.array([getattr(model, quantity) for quantity in off_node.STORED])
        structures.append(values if converged[-1] else np.full_like(values, np.nan))
    with options.output.open("wb") as stream:
        np.savez_compressed(stream, structures=np.array(structures, dtype=np.float32), converged=np.array(converged))


if __name__ == "__main__":
    main()
