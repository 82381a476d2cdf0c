"""Atmospheres converged between the nodes of the packaged store, with opacity tables of their own metallicity.

They are what the closure and interpolation tests compare the packaged grid with. An opacity table takes about a minute,
so the atmospheres are kept, as structures, in ``tests/data/off_node_atmospheres.npz``; widths are computed from them
anew in every test run. The metallicities of the random stars are six random values, one in every step of the
axis from -2.5 to 0.5.

``python -m tests.integration.off_node --work FOLDER`` remakes the file (a quarter of an hour on one core); tables and
models that are in FOLDER already are not computed again.
"""

from __future__ import annotations

import argparse
import sys
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import numpy as np

from specsolve.atmosphere.build import converge_node, part_bytes, read_part
from specsolve.atmosphere.model import Atmosphere

DATA = Path(__file__).resolve().parents[1] / "data" / "off_node_atmospheres.npz"
SEED = 41
TEFF_RANGE, LOGG_RANGE, VMIC_RANGE = (4500.0, 6500.0), (1.0, 5.0), (0.6, 2.4)
MH_CELLS = ((-2.5, -2.0), (-2.0, -1.5), (-1.5, -1.0), (-1.0, -0.5), (-0.5, 0.0), (0.0, 0.5))
"""Steps of the metallicity axis; one random value lies in each."""
LEAST_FROM_NODE = 0.06  # dex: a drawn metallicity keeps this distance from the nodes
STARS_PER_MH, FURTHER_STARS = 25, 50
CENTRES_PER_MH = 24
CENTRE_MH = (-0.25, -1.25, -2.25, 0.25)
STORED = ("column_mass", "temperature", "gas_pressure", "electron_density", "log_tau")
RANDOM, CENTRE = 0, 1


@dataclass(frozen=True)
class OffNode:
    """One atmosphere between nodes.

    Attributes
    ----------
    kind : int
        `RANDOM` or `CENTRE`.
    vmic : float
        Microturbulence of a random star's lines [km/s]; nan for centres of cells.
    model : Atmosphere
        Status "failed", without a structure, where none converged.
    """

    kind: int
    vmic: float
    model: Atmosphere

    @property
    def theta(self) -> np.ndarray:
        """teff, logg, mh, vmic."""
        return np.array([self.model.teff, self.model.logg, self.model.mh, self.vmic])


def random_points() -> np.ndarray:
    """The random stars: teff, logg, mh, vmic, shape (200, 4)."""
    rng = np.random.default_rng(SEED)
    points, metallicities = [], []

    def draw(mh: float, source: np.random.Generator) -> None:
        teff, logg, vmic = (source.uniform(*limits) for limits in (TEFF_RANGE, LOGG_RANGE, VMIC_RANGE))
        points.append([round(teff, 1), round(logg, 3), mh, round(vmic, 3)])

    for low, high in MH_CELLS:
        metallicities.append(round(rng.uniform(low + LEAST_FROM_NODE, high - LEAST_FROM_NODE), 3))
        for _ in range(STARS_PER_MH):
            draw(metallicities[-1], rng)
    more = np.random.default_rng(SEED + 2)
    for i in range(FURTHER_STARS):
        draw(metallicities[i % len(metallicities)], more)
    return np.array(points)


def centre_points() -> np.ndarray:
    """Centres of cells of the default axes, drawn at random: teff, logg, mh, nan, shape (96, 4)."""
    rng = np.random.default_rng(SEED + 1)
    cells = [
        (t, g) for t in np.arange(4125.0, 6876.0, 250.0) for g in np.arange(0.25, 4.76, 0.5) if g > 0.5 or t < 5000
    ]
    points = []
    for mh in CENTRE_MH:
        for i in rng.choice(len(cells), CENTRES_PER_MH, replace=False):
            points.append([*cells[i], mh, np.nan])
    return np.array(points)


def table(mh: float, folder: Path):
    """Opacity table of a metallicity, kept in a folder."""
    from specsolve.atmosphere.blanketing import load_blanketing, save_blanketing
    from specsolve.atmosphere.blanketing_build import build

    named = folder / f"table_{mh:+.3f}"
    named.mkdir(parents=True, exist_ok=True)
    path = named / f"opacity_{mh:+.2f}.npz"
    if not path.exists():
        save_blanketing(build(mh), path.with_name("aside.npz"))
        path.with_name("aside.npz").rename(path)
    return load_blanketing(mh, named)


def converge(points: np.ndarray, folder: Path) -> None:
    """Converge the atmospheres at points that are not in the folder yet, metallicity by metallicity.

    The first of a metallicity starts cold, the others from their nearest neighbour: no packaged atmosphere is involved.
    """
    for mh in dict.fromkeys(points[:, 2]):
        nodes = [(float(t), float(g)) for t, g, m, _ in points if m == mh]
        done: dict[tuple[float, float], Atmosphere] = {}
        remaining = sorted(nodes, key=lambda n: (_distance(n, (5750.0, 4.5)), n))
        while remaining:
            near = [n for n, a in done.items() if a.status == "converged"]
            if near:
                remaining.sort(key=lambda n: (min(_distance(n, c) for c in near), n))
            node = remaining.pop(0)
            path = folder / f"model_{node[0]:g}_{node[1]:g}_{mh:+g}.npz"
            model = read_part(path)
            if model is None:
                model = converge_node(node, done, float(mh), table(float(mh), folder), 1.0)
                path.write_bytes(part_bytes(model))
                print(f"{node} {mh:+.3f} {model.status} {model.reason}", file=sys.stderr, flush=True)
            done[node] = model


def _distance(a: tuple[float, float], b: tuple[float, float]) -> float:
    return float(np.hypot((a[0] - b[0]) / 250.0, (a[1] - b[1]) / 0.5))


def collect(folder: Path, output: Path) -> None:
    """Gather the models of a folder into one file."""
    numbers, structures = [], []
    for kind, points in ((RANDOM, random_points()), (CENTRE, centre_points())):
        for teff, logg, mh, vmic in points:
            model = read_part(folder / f"model_{teff:g}_{logg:g}_{mh:+g}.npz")
            if model is None:
                raise SystemExit(f"{teff:g} {logg:g} {mh:+g} is not in {folder}")
            good = model.status == "converged"
            numbers.append([kind, teff, logg, mh, vmic, model.alpha, model.vmic, model.flux_error, good])
            structures.append([getattr(model, name) for name in STORED])
    structures = np.array(structures)
    structures[~np.array(numbers)[:, -1].astype(bool)] = np.nan
    with output.open("wb") as stream:
        np.savez_compressed(stream, numbers=np.array(numbers), structures=structures.astype(np.float32))


@lru_cache
def load() -> tuple[OffNode, ...]:
    """The atmospheres of the data file."""
    with np.load(DATA, allow_pickle=False) as stored:
        numbers, structures = stored["numbers"], stored["structures"].astype(float)
    items = []
    for (kind, teff, logg, mh, vmic, alpha, opacity_vmic, flux_error, good), structure in zip(
        numbers, structures, strict=True
    ):
        model = Atmosphere(
            teff=teff,
            logg=logg,
            mh=mh,
            alpha=alpha,
            vmic=opacity_vmic,
            flux_error=flux_error,
            status="converged" if good else "failed",
            **dict(zip(STORED, structure, strict=True)),
        )
        items.append(OffNode(int(kind), float(vmic), model))
    return tuple(items)


def main(arguments: list[str] | None = None) -> None:
    """Command line of the module."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--work", type=Path, required=True, help="folder for tables and models")
    parser.add_argument("--only", choices=("random", "centres"), help="converge these, collect nothing")
    parser.add_argument("--output", type=Path, default=DATA)
    options = parser.parse_args(arguments)
    options.work.mkdir(parents=True, exist_ok=True)
    if options.only != "centres":
        converge(random_points(), options.work)
    if options.only != "random":
        converge(centre_points(), options.work)
    if options.only is None:
        options.output.parent.mkdir(exist_ok=True)
        collect(options.work, options.output)


if __name__ == "__main__":
    main()
