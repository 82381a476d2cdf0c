"""Building a response grid, extending one, and going on after a crash.

The nodes are computed in parts; every part is on disk as soon as it is finished, under a key that hashes all that
decides the numbers. When the last one is there, parts are merged into blocks and the header is written. A build killed
at any moment goes on when it is started again, and ends with the same bytes as an undisturbed one.
"""

from __future__ import annotations

import multiprocessing
import os
import shutil
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Executor, ProcessPoolExecutor, as_completed
from contextlib import contextmanager, nullcontext
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from specsolve.durable import output_errors
from specsolve.errors import OutputError
from specsolve.grid import reuse
from specsolve.grid.codes import CODE_TYPE, MISSING
from specsolve.grid.engine import Engine, codes_of_nodes, start_worker
from specsolve.grid.lock import exclusive
from specsolve.grid.parts import Parts, remove_finished
from specsolve.grid.plan import Plan, plan_build
from specsolve.grid.store import LINES_PER_BLOCK, ResponseGrid
from specsolve.grid.write import make_header, write_block, write_header
from specsolve.lines import LineList

if TYPE_CHECKING:
    from specsolve.atmosphere.store import AtmosphereStore


def build_grid(
    lines: LineList,
    directory: str | Path,
    *,
    atmospheres: AtmosphereStore | None = None,
    teff: Sequence[float] | None = None,
    logg: Sequence[float] | None = None,
    mh: Sequence[float] | None = None,
    vmic: Sequence[float] | None = None,
    dA: Sequence[float] | None = None,
    treatment: str = "lte",
    others: Sequence[ResponseGrid] = (),
    workers: int = 1,
    executor: Executor | None = None,
    engine: Engine | None = None,
    progress: Callable[[int, int], None] | None = None,
    announce: Callable[[Plan], None] | None = None,
) -> ResponseGrid:
    """Build a grid, extend the one in `directory` by lines that it lacks, or finish an interrupted build.

    Parameters
    ----------
    lines : LineList
    directory : path-like
        Made if it does not exist.
    atmospheres : AtmosphereStore, optional
        The packaged ones by default.
    teff, logg, mh : sequence of float, optional
        Nodes, among those of the atmospheres; those of the grid in `directory`, else all.
    vmic, dA : sequence of float, optional
        Nodes; default 0 to 3.5 km/s by 0.5 and -1.4 to 1.4 dex by 0.4.
    treatment : str
    others : sequence of ResponseGrid
        Grids whose lines may be taken over: same atmospheres, all our nodes, same numbers of the line, and widths
        that a recomputation at three nodes confirms.
    workers : int
        Processes, if no `executor` is given.
    executor : concurrent.futures.Executor, optional
        Gets self-contained tasks; only this process writes.
    engine : Engine, optional
        What computes widths; that of the treatment by default.
    progress : callable, optional
        Called with (finished nodes, all nodes).
    announce : callable, optional
        Called once with the `Plan`, before work begins.

    Returns
    -------
    ResponseGrid

    Raises
    ------
    LockError, StoreError, OutputError, InputError

    Examples
    --------
    >>> build_grid(read_line_list("my_lines.ecsv"), "my_grid", others=[ResponseGrid.packaged()])  # doctest: +SKIP
    """
    directory = Path(directory)
    with output_errors(directory):
        directory.mkdir(parents=True, exist_ok=True)
    with exclusive(directory):
        for aside in directory.glob("*.aside"):
            aside.unlink()
        axes = {"teff": teff, "logg": logg, "mh": mh, "vmic": vmic, "dA": dA}
        plan = plan_build(lines, directory, atmospheres, axes, treatment, others, engine)
        if plan.old is not None:
            remove_finished(directory, [build["key"] for build in plan.old.header["builds"]])
            if plan.covered == len(plan.lines):
                if announce is not None:
                    announce(plan)
                return plan.old
        if announce is not None:
            announce(plan)
        check_space(directory, plan)
        shapes = [(len(chunk), plan.computed.size, *(len(axis) for axis in plan.line_axes)) for chunk in plan.chunks]
        parts = Parts(directory, plan.key, shapes)
        compute_parts(plan, parts, workers, executor, progress)
        merge(plan, parts, directory)
        parts.remove()
    return ResponseGrid.open(directory)


def check_space(directory: Path, plan: Plan) -> None:
    """Refuse to start what the disk cannot hold.

    Raises
    ------
    OutputError
    """
    per_line = CODE_TYPE.itemsize * plan.n_widths
    n_new = len(plan.lines) - plan.covered
    needed = per_line * (plan.computed.size * len(plan.nodes) + n_new * int(np.prod([len(a) for a in plan.node_axes])))
    needed -= sum(path.stat().st_size for path in directory.glob("parts-*/*.npy"))
    free = shutil.disk_usage(directory).free
    if needed > free:
        raise OutputError(
            f"{directory}: the build needs {needed / 1e6:.1f} MB, the disk has {free / 1e6:.1f} MB left. "
            "Free some space, choose another --output, or fewer nodes.",
            path=directory,
        )


def compute_parts(
    plan: Plan,
    parts: Parts,
    workers: int = 1,
    executor: Executor | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> None:
    """Compute the parts that are not on disk yet."""
    chunks = plan.chunks
    open_parts = [number for number in range(len(chunks)) if number not in parts]
    done = sum(len(chunk) for number, chunk in enumerate(chunks) if number in parts)
    vmic, dA = (axis.values for axis in plan.line_axes)
    lines = plan.new_lines

    def finish(number: int, codes: np.ndarray) -> None:
        nonlocal done
        parts.write(number, codes)
        done += len(chunks[number])
        if progress is not None:
            progress(done, len(plan.nodes))

    if progress is not None:
        progress(done, len(plan.nodes))
    if executor is None and (workers == 1 or len(open_parts) <= 1):
        for number in open_parts:
            atmospheres = [plan.atmosphere(node) for node in chunks[number]]
            finish(number, codes_of_nodes(plan.engine, atmospheres, lines, vmic, dA))
        return
    if executor is None:
        # compile here, so that the workers find the compiled kernels in the cache
        codes_of_nodes(plan.engine, [plan.atmosphere(plan.nodes[0])], lines.select([0]), vmic, dA)
    with own_pool(workers) if executor is None else nullcontext(executor) as pool:
        futures = {
            pool.submit(
                codes_of_nodes, plan.engine, [plan.atmosphere(n) for n in chunks[number]], lines, vmic, dA
            ): number
            for number in open_parts
        }
        try:
            for future in as_completed(futures):
                finish(futures[future], future.result())
        finally:
            for future in futures:
                future.cancel()


@contextmanager
def own_pool(workers: int) -> Iterator[Executor]:
    """Worker processes, each with one linear-algebra thread, that end when this process does."""
    names = ("OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "OMP_NUM_THREADS")
    before = {name: os.environ.get(name) for name in names}
    os.environ.update(dict.fromkeys(names, "1"))
    context = multiprocessing.get_context("spawn")
    try:
        with ProcessPoolExecutor(workers, context, initializer=start_worker, initargs=(os.getpid(),)) as pool:
            yield pool
    finally:
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


def merge(plan: Plan, parts: Parts, directory: Path) -> None:
    """Write the new blocks and, last, the header."""
    old_blocks = () if plan.old is None else plan.old.blocks
    number = sum(block.treatment == plan.treatment for block in old_blocks)
    place_of = {int(line): place for place, line in enumerate(plan.computed)}
    shape = tuple(len(axis) for axis in plan.node_axes)
    tail = tuple(len(axis) for axis in plan.line_axes)
    blocks = []
    for first in range(plan.covered, len(plan.lines), LINES_PER_BLOCK):
        members = range(first, min(first + LINES_PER_BLOCK, len(plan.lines)))
        codes = np.full((*shape, len(members), *tail), MISSING, dtype=CODE_TYPE)
        fresh = [(i, place_of[line]) for i, line in enumerate(members) if line in place_of]
        if fresh:
            into, source = map(list, zip(*fresh, strict=True))
            for part, chunk in enumerate(plan.chunks):
                values = parts.read(part)
                for k, node in enumerate(chunk):
                    codes[node][into] = values[k, source]
        for i, line in enumerate(members):
            if line in plan.taken:
                codes[..., i, :, :] = _copied(plan, *plan.taken[line])
        blocks.append(write_block(directory, plan.treatment, number + len(blocks), first, codes))
    missing = {} if plan.old is None else {name: plan.old.missing(name) for name in plan.old.treatments}
    build = {"key": plan.key, "engine": dict(plan.engine.version), "first_line": plan.covered,
             "computed": plan.computed.size, "taken_over": len(plan.taken)}  # fmt: skip
    header = make_header(
        node_axes=plan.node_axes,
        line_axes=plan.line_axes,
        lines=plan.lines,
        blocks=[*old_blocks, *blocks],
        missing={**missing, plan.treatment: plan.missing},
        atmospheres_identity=plan.atmospheres.identity,
        description=f"Equivalent widths of {len(plan.lines)} Fe I and Fe II lines, "
        + " and ".join(sorted({*missing, plan.treatment})),
        builds=[*([] if plan.old is None else plan.old.header["builds"]), build],
    )
    write_header(directory, header)


def _copied(plan: Plan, other: ResponseGrid, line: int) -> np.ndarray:
    """Codes of a line of another grid at all our nodes, shape (teff, logg, mh, vmic, dA)."""
    positions = reuse.node_positions(other, plan.node_axes, plan.line_axes)
    shape = tuple(len(axis) for axis in plan.node_axes)
    nodes = np.indices(shape).reshape(len(shape), -1).T
    codes = reuse.codes_of_other(other, plan.treatment, positions, nodes, np.array([line]))[:, 0]
    return codes.reshape(*shape, *codes.shape[1:])
