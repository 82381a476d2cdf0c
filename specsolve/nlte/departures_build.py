"""Building a store of departures: coarse nodes first, warm starts from them, every finished node on disk at once.

Nodes with even indices on all axes are solved from LTE; the others start from the mean of their solved coarse neighbours, so
that the numbers do not depend on the number of workers, and what an interrupted build has is spread over the whole range.
A build that was interrupted goes on from the nodes that are on disk.
"""

from __future__ import annotations

import hashlib
import io
import itertools
import json
import multiprocessing
import os
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Executor, ProcessPoolExecutor, as_completed
from contextlib import contextmanager, nullcontext
from dataclasses import asdict
from functools import cache
from pathlib import Path

import numpy as np

from specsolve.atmosphere.build import sources_hash
from specsolve.atmosphere.model import Atmosphere
from specsolve.atmosphere.store import AtmosphereStore
from specsolve.durable import claim_parts, write_atomically
from specsolve.matter.composition import composition_for
from specsolve.nlte.departures import AXES, DEPTHS, DepartureStore, at_depths, write_departures
from specsolve.nlte.equilibrium import Departures, solve_equilibrium
from specsolve.nlte.packaged import DEFAULT_SIZE, atom_path, packaged_atom
from specsolve.nlte.recipe import Recipe

Index = tuple[int, int, int]
PARTS = "parts"
#: Program text and tables that decide the numbers.
SOURCES = ("nlte", "matter", "radiation", "atmosphere/blanketing_sampling.py", "constants.py", "data/matter",
           "data/blanketing")  # fmt: skip


def departures_key(atmospheres: AtmosphereStore, recipe: Recipe, size: int) -> str:
    """Hash (hex) of all that decides the numbers: sources, atom, recipe, atmospheres."""
    content = [sources_hash(SOURCES), atom_sha256(size), asdict(recipe), atmospheres.identity, list(DEPTHS)]
    return hashlib.sha256(json.dumps(content, sort_keys=True).encode()).hexdigest()


@cache
def atom_sha256(size: int) -> str:
    """SHA-256 (hex) of the file of a packaged atom."""
    return hashlib.sha256(atom_path(size).read_bytes()).hexdigest()


def solve_node(atmosphere: Atmosphere, recipe: Recipe, size: int, start: np.ndarray | None = None) -> Departures:
    """Departures of one atmosphere.

    Parameters
    ----------
    atmosphere : Atmosphere
    recipe : Recipe
    size : int
        Of the packaged atom.
    start : ndarray, shape (n_levels, n_depths), optional
        ln b at `DEPTHS` to begin with. If it does not converge from there, LTE is tried.
    """
    composition = composition_for(atmosphere.mh, atmosphere.alpha)
    atom = packaged_atom(size)
    if start is not None:
        depths = np.array(DEPTHS)
        guess = Departures(log_b=start, column_mass=depths, log_tau=depths, converged=True, iterations=0, change=0.0)
        found = solve_equilibrium(atmosphere, composition, atom, recipe, guess)
        if found.converged:
            return found
    return solve_equilibrium(atmosphere, composition, atom, recipe)


def part_path(parts: Path, index: Index) -> Path:
    """File of one finished node."""
    return parts / "{:02d}_{:02d}_{:02d}.npz".format(*index)


def write_part(path: Path, found: Departures) -> None:
    """Put one node on disk."""
    log_b = at_depths(found.log_b, found.log_tau) if found.converged else np.zeros((0, 0))
    buffer = io.BytesIO()
    np.savez(buffer, log_b=log_b.astype(np.float32), numbers=np.array([found.iterations, found.change]),
             words=np.array([found.reason]))  # fmt: skip
    write_atomically(path, buffer.getvalue())


def read_part(path: Path) -> tuple[np.ndarray, dict] | None:
    """ln b and status record of a finished node; `None` if there is none."""
    try:
        with np.load(path, allow_pickle=False) as part:
            log_b, numbers, words = part["log_b"], part["numbers"], part["words"]
    except (OSError, ValueError, KeyError, EOFError):
        return None
    change = float(f"{numbers[1]:.2g}") if np.isfinite(numbers[1]) else None
    status = "converged" if log_b.size else "failed"
    return log_b, {"status": status, "reason": str(words[0]), "iterations": int(numbers[0]), "change": change}


def run_node(atmosphere: Atmosphere, index: Index, neighbours: Sequence[Index], parts: str, recipe: Recipe, size: int):
    """The task of a worker: solve a node from its neighbours that are on disk, and put it there."""
    known = [read_part(part_path(Path(parts), other)) for other in neighbours]
    usable = [part[0].astype(float) for part in known if part is not None and part[0].size]
    start = np.mean(usable, axis=0) if usable else None
    write_part(part_path(Path(parts), index), solve_node(atmosphere, recipe, size, start))


def coarse_neighbours(index: Index, shape: Sequence[int]) -> list[Index]:
    """Coarse nodes (even indices, or the last) around a node; empty for a coarse one."""
    choices = []
    for i, n in zip(index, shape, strict=True):
        choices.append([i] if i % 2 == 0 else [k for k in (i - 1, i + 1) if k < n])
    found = list(itertools.product(*choices))
    return [] if found == [tuple(index)] else found


def build_departures(
    directory: str | Path,
    *,
    atmospheres: AtmosphereStore | None = None,
    nodes: Sequence[Index] | None = None,
    recipe: Recipe | None = None,
    size: int = DEFAULT_SIZE,
    workers: int = 1,
    executor: Executor | None = None,
    progress: Callable[[int, int], None] | None = None,
    provenance: dict | None = None,
) -> DepartureStore:
    """Build a store of departures, or finish one that was interrupted.

    Parameters
    ----------
    directory : path
    atmospheres : AtmosphereStore, optional
        The packaged ones by default.
    nodes : sequence of index triples, optional
        All nodes with an atmosphere by default; others are written as left out.
    recipe : Recipe, optional
    size : int
        Of the packaged atom.
    workers : int
        Processes, if no `executor` is given.
    executor : concurrent.futures.Executor, optional
    progress : callable, optional
        Called with (finished nodes, all nodes).
    provenance : dict, optional
        Further header entries.

    Raises
    ------
    StoreError
        The directory holds parts of a build with another configuration or program.
    """
    atmospheres = AtmosphereStore.packaged() if atmospheres is None else atmospheres
    recipe = recipe or Recipe()
    directory = Path(directory)
    parts = directory / PARTS
    sources = sources_hash(SOURCES)  # of the program as it is now, whatever is edited meanwhile
    claim_parts(parts, departures_key(atmospheres, recipe, size), "recipe, atom, atmospheres or version")
    shape = tuple(atmospheres.axes[name].size for name in AXES)
    wanted = list(np.ndindex(*shape)) if nodes is None else [tuple(map(int, node)) for node in nodes]
    models = {index: _atmosphere(atmospheres, index) for index in wanted}
    models = {index: model for index, model in models.items() if model is not None}
    coarse = [index for index in models if not coarse_neighbours(index, shape)]
    fine = [index for index in models if coarse_neighbours(index, shape)]
    done = {index for index in models if read_part(part_path(parts, index)) is not None}
    if progress is not None:
        progress(len(done), len(models))
    if executor is None and workers > 1:
        _compile(models, recipe, size)
    with _pool(workers) if executor is None else nullcontext(executor) as pool:
        for batch in (coarse, fine):
            futures = {}
            for index in (i for i in batch if i not in done):
                task = (models[index], index, coarse_neighbours(index, shape), str(parts), recipe, size)
                if pool is None:
                    run_node(*task)
                    done.add(index)
                    if progress is not None:
                        progress(len(done), len(models))
                else:
                    futures[pool.submit(run_node, *task)] = index
            try:
                for future in as_completed(futures):
                    future.result()
                    done.add(futures[future])
                    if progress is not None:
                        progress(len(done), len(models))
            finally:
                for future in futures:
                    future.cancel()
    header = {"sources_sha256": sources, **(provenance or {})}
    store = assemble(directory, atmospheres, list(models), recipe, size, header)
    for path in parts.iterdir():
        path.unlink()
    parts.rmdir()
    return store


def assemble(
    directory: Path, atmospheres: AtmosphereStore, nodes: Sequence[Index], recipe: Recipe, size: int,
    provenance: dict | None = None,
) -> DepartureStore:  # fmt: skip
    """Write the store from the parts that are on disk."""
    values, records = {}, {}
    for index in nodes:
        part = read_part(part_path(Path(directory) / PARTS, index))
        if part is not None:
            records[index] = part[1]
            if part[0].size:
                values[index] = part[0]
    header = {
        "atom": size,
        "n_levels": packaged_atom(size).n_levels,
        "atom_sha256": atom_sha256(size),
        "atom_source": packaged_atom(size).source,
        "recipe": asdict(recipe),
        "atmospheres_identity": atmospheres.identity,
        **(provenance or {}),
    }
    return write_departures(directory, atmospheres.axes, values, records, header)


def _atmosphere(atmospheres: AtmosphereStore, index: Index) -> Atmosphere | None:
    node = tuple(float(atmospheres.axes[name][i]) for name, i in zip(AXES, index, strict=True))
    return atmospheres.get(*node) if atmospheres.has(*node) else None


def _compile(models: dict, recipe: Recipe, size: int) -> None:
    """Compile in this process, so that the workers find the compiled kernels in the cache."""
    if models:
        solve_node(next(iter(models.values())), recipe, size)


@contextmanager
def _pool(workers: int) -> Iterator[Executor | None]:
    """Worker processes with one linear-algebra thread each; none for one worker."""
    if workers == 1:
        yield None
        return
    names = ("OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "OMP_NUM_THREADS")
    before = {name: os.environ.get(name) for name in names}
    os.environ.update(dict.fromkeys(names, "1"))
    try:
        with ProcessPoolExecutor(workers, multiprocessing.get_context("spawn")) as pool:
            yield pool
    finally:
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value
