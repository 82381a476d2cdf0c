"""Building a store of atmospheres: one chain of warm starts per metallicity, every finished node on disk at once.

A chain begins with a cold start near the Sun and grows outwards, each node starting from its nearest converged neighbour.
Its order does not depend on the number of workers, so neither do the numbers. A build that was interrupted goes on
from the nodes that are on disk.
"""

from __future__ import annotations

import hashlib
import io
import json
from collections.abc import Callable, Sequence
from concurrent.futures import Executor, ProcessPoolExecutor, wait
from importlib import resources
from pathlib import Path

import numpy as np

from specsolve.atmosphere.blanketing import Blanketing
from specsolve.atmosphere.model import Atmosphere
from specsolve.atmosphere.store import QUANTITIES, AtmosphereStore, write_store
from specsolve.atmosphere.structure import solve_structure
from specsolve.durable import claim_parts, write_atomically
from specsolve.matter.composition import Composition, composition_for

DEFAULT_TEFF = tuple(np.arange(4000.0, 7000.1, 250.0))
DEFAULT_LOGG = tuple(np.arange(0.0, 5.01, 0.5))
DEFAULT_MH = tuple(np.arange(-3.0, 0.51, 0.5))
COLD_START = (5750.0, 4.5)  # where a chain begins, if among its nodes
TEFF_STEP, LOGG_STEP = 250.0, 0.5  # one unit of distance between nodes
EASIER_LOGG = 1.0  # dex: where a grey start fails and there is no neighbour, a star of so much higher gravity is one
FIRST_SHARE, LEAST_SHARE = 0.3, 0.07  # of the way from a neighbour, where the whole way at once fails
COOLEST_SUPERGIANT = 5000.0  # K: log g below 0.5 is asked for only up to here
PARTS = "parts"
SOURCE_SUFFIXES = (".py", ".npy", ".npz", ".csv", ".ecsv", ".json")
SOURCES = ("matter", "radiation", "atmosphere", "constants.py", "data/matter", "data/blanketing")


def sources_hash(names: Sequence[str] = SOURCES) -> str:
    """SHA-256 over the program text and tables that decide the numbers of an atmosphere."""
    root = Path(str(resources.files("specsolve")))
    digest = hashlib.sha256()
    for name in names:
        path = root / name
        found = [path] if path.is_file() else sorted(path.rglob("*"))
        files = [file for file in found if file.suffix in SOURCE_SUFFIXES]
        for file in files:
            digest.update(file.relative_to(root).as_posix().encode())
            digest.update(hashlib.sha256(file.read_bytes()).digest())
    return digest.hexdigest()


def wanted_nodes(teff: Sequence[float], logg: Sequence[float]) -> list[tuple[float, float]]:
    """(teff, logg) pairs to build: all, but log g below 0.5 only for Teff <= 5000 K."""
    return [(float(t), float(g)) for t in teff for g in logg if g >= 0.5 or t <= COOLEST_SUPERGIANT]


def blanketing_for(mh: float) -> Blanketing:
    """The packaged line opacity table of [M/H], or one computed from the packaged line lists (about a minute)."""
    from specsolve.atmosphere.blanketing import PACKAGED_MH, load_blanketing

    if np.min(np.abs(np.asarray(PACKAGED_MH) - mh)) < 1e-9:
        return load_blanketing(mh)
    from specsolve.atmosphere.blanketing_build import build

    return build(mh)


def _distance(a: tuple[float, float], b: tuple[float, float]) -> float:
    return float(np.hypot((a[0] - b[0]) / TEFF_STEP, (a[1] - b[1]) / LOGG_STEP))


def converge_node(
    node: tuple[float, float],
    done: dict[tuple[float, float], Atmosphere],
    mh: float,
    blanketing: Blanketing,
    power: float,
) -> Atmosphere:
    """Converge one node of a chain: from its nearest neighbours, then by smaller steps, then cold (by way of a denser star)."""
    composition = composition_for(mh)
    good = sorted((a for a in done.values() if a.status == "converged"),
                  key=lambda a: (_distance(node, (a.teff, a.logg)), a.teff, a.logg))  # fmt: skip
    result = None
    for start in good[:2]:
        result = solve_structure(*node, composition, blanketing, start=start, power=power)
        if result.status == "converged":
            return result
    for origin in good[:2]:
        reached = _approach(origin, node, composition, blanketing, power)
        if reached is not None:
            return reached
    cold = solve_structure(*node, composition, blanketing, power=power)
    if cold.status != "converged" and not good:
        dense = solve_structure(node[0], node[1] + EASIER_LOGG, composition, blanketing, power=power)
        reached = _approach(dense, node, composition, blanketing, power) if dense.status == "converged" else None
        cold = cold if reached is None else reached
    return cold if cold.status == "converged" or result is None else result


def _approach(
    origin: Atmosphere, node: tuple[float, float], composition: Composition, blanketing: Blanketing, power: float
) -> Atmosphere | None:
    """Go from a converged neighbour to a node by steps that are halved where one fails; `None` if they get too small."""
    done, step, here = 0.0, FIRST_SHARE, origin
    while step >= LEAST_SHARE:
        share = min(done + step, 1.0)
        teff = origin.teff + share * (node[0] - origin.teff)
        logg = origin.logg + share * (node[1] - origin.logg)
        trial = solve_structure(teff, logg, composition, blanketing, start=here, power=power)
        if trial.status != "converged":
            step *= 0.5
            continue
        if share == 1.0:
            return trial
        done, here = share, trial
    return None


def build_chain(mh: float, nodes: Sequence[tuple[float, float]], parts: str, power: float) -> None:
    """Build all nodes of one metallicity, writing each to the directory `parts` as soon as it is finished."""
    blanketing = None
    done: dict[tuple[float, float], Atmosphere] = {}
    remaining = sorted(nodes, key=lambda n: (_distance(n, COLD_START), n))
    while remaining:
        converged = [n for n, a in done.items() if a.status == "converged"]
        if converged:
            remaining.sort(key=lambda n: (min(_distance(n, c) for c in converged), _distance(n, COLD_START), n))
        node = remaining.pop(0)
        path = part_path(parts, (*node, mh))
        model = read_part(path)
        if model is None:
            blanketing = blanketing_for(mh) if blanketing is None else blanketing
            model = converge_node(node, done, mh, blanketing, power)
            write_atomically(path, part_bytes(model))
        done[node] = model


def part_path(parts: str | Path, node: tuple[float, float, float]) -> Path:
    """File of one finished node."""
    return Path(parts) / f"t{node[0]:g}_g{node[1]:g}_m{node[2]:+g}.npz"


def part_bytes(model: Atmosphere) -> bytes:
    """Serialise one node."""
    buffer = io.BytesIO()
    numbers = [model.teff, model.logg, model.mh, model.alpha, model.vmic, model.flux_error]
    np.savez(buffer, structure=np.array([getattr(model, q) for q in QUANTITIES]), numbers=np.array(numbers),
             words=np.array([model.status, model.reason]))  # fmt: skip
    return buffer.getvalue()


def read_part(path: Path) -> Atmosphere | None:
    """Read one finished node; `None` if there is none (a file that is not complete counts as none)."""
    try:
        with np.load(path, allow_pickle=False) as part:
            structure, numbers, words = part["structure"], part["numbers"], part["words"]
    except (OSError, ValueError, KeyError, EOFError):
        return None
    names = ("teff", "logg", "mh", "alpha", "vmic", "flux_error")
    return Atmosphere(**dict(zip(names, map(float, numbers), strict=True)), **dict(zip(QUANTITIES, structure, strict=True)),
                      status=str(words[0]), reason=str(words[1]))  # fmt: skip


def build_store(
    directory: str | Path,
    *,
    teff: Sequence[float] = DEFAULT_TEFF,
    logg: Sequence[float] = DEFAULT_LOGG,
    mh: Sequence[float] = DEFAULT_MH,
    power: float = 1.0,
    workers: int = 1,
    executor: Executor | None = None,
    progress: Callable[[int, int], None] | None = None,
    provenance: dict | None = None,
) -> AtmosphereStore:
    """Build a store of atmospheres, or finish one that was interrupted.

    Parameters
    ----------
    directory : path
    teff, logg, mh : sequence of float
        Node values [K], [dex cgs], [dex].
    power : float
        Exponent of the missing-opacity multiplier.
    workers : int
        Processes, if no `executor` is given.
    executor : concurrent.futures.Executor, optional
    progress : callable, optional
        Called with (finished nodes, all nodes).
    provenance : dict, optional
        Further header entries.

    Returns
    -------
    AtmosphereStore

    Raises
    ------
    StoreError
        The directory holds parts of a build with another configuration or program.
    """
    directory = Path(directory)
    parts = directory / PARTS
    pairs = wanted_nodes(teff, logg)
    key = hashlib.sha256(json.dumps([sources_hash(), power]).encode()).hexdigest()
    claim_parts(parts, key, "configuration or version")
    total = len(pairs) * len(mh)
    own = executor is None
    executor = ProcessPoolExecutor(workers) if executor is None else executor
    try:
        # solar metallicities take longest: start them first
        pending = {executor.submit(build_chain, float(m), pairs, str(parts), power) for m in sorted(mh, reverse=True)}
        while pending:
            finished, pending = wait(pending, timeout=0.5)
            for future in finished:
                future.result()
            if progress is not None:
                progress(sum(1 for m in mh for p in pairs if part_path(parts, (*p, float(m))).exists()), total)
    finally:
        if own:
            executor.shutdown(wait=True, cancel_futures=True)
    models = {(*p, float(m)): read_part(part_path(parts, (*p, float(m)))) for p in pairs for m in mh}
    header = {"key": key, "multiplier_power": power, **(provenance or {})}
    axes = {"teff": np.array(sorted(teff)), "logg": np.array(sorted(logg)), "mh": np.array(sorted(mh))}
    store = write_store(directory, axes, models, header)
    for path in parts.iterdir():
        path.unlink()
    parts.rmdir()
    return store
