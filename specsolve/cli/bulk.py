"""Many stars into files: workers or a cluster, a journal that survives any crash, and a short word at the end."""

from __future__ import annotations

import hashlib
import json
import os
import time
from collections import Counter
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import BrokenExecutor, Executor
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from specsolve.cli.settings import Settings
from specsolve.errors import SpecsolveError, UsageError

if TYPE_CHECKING:
    from specsolve.balance.batch import Setting
    from specsolve.balance.solution import Solution
    from specsolve.balance.star import Star

JOURNAL_FROM = 50  # stars; fewer are solved again sooner than a journal is read
FLUSH_S = 0.5  # finished stars are on the disk after at most this time
SCHEDULER_TIMEOUT_S = 15
SCHEDULER_RETRIES = 10  # of a block whose worker died
# Program text that decides the numbers or their form; a journal of another version is refused.
DECIDING = ("balance", "grid", "lines", "matter/composition.py", "report", "schema.py", "constants.py")


@dataclass(frozen=True)
class Outcome:
    """How the stars of a run ended.

    Attributes
    ----------
    status : dict of int to (star, status, reason)
        Of the finished ones, by place.
    interrupted : bool
    n_stars : int
    """

    status: Mapping[int, tuple[str, str, str]]
    interrupted: bool
    n_stars: int

    def summary(self) -> str:
        """Counts by status.

        Examples
        --------
        >>> Outcome({0: ("a", "solved", ""), 1: ("b", "tied", "")}, False, 2).summary()
        '2 stars: 1 solved, 1 tied'
        """
        counts = Counter(status for _, status, _ in self.status.values())
        return f"{len(self.status)} stars: " + ", ".join(f"{n} {status}" for status, n in counts.most_common())


@contextmanager
def executor_for(workers: int, scheduler: str | None = None) -> Iterator[Executor | None]:
    """Processes on this computer, the workers of a dask.distributed scheduler, or None for one process.

    Raises
    ------
    UsageError
        If the extra is not installed, or no scheduler answers.
    """
    if scheduler is not None:
        with _cluster(scheduler) as executor:
            yield executor
        return
    executor = make_executor(workers)
    if executor is None:
        yield None
        return
    try:
        yield executor
    except BaseException:
        executor.shutdown(wait=False, cancel_futures=True)
        raise
    executor.shutdown(wait=True)


def make_executor(workers: int) -> Executor | None:
    """Processes on this computer, which end when this one is killed; None for one."""
    if workers == 1:
        return None
    import multiprocessing
    from concurrent.futures import ProcessPoolExecutor

    from specsolve.grid.engine import start_worker

    context = multiprocessing.get_context("spawn")
    return ProcessPoolExecutor(workers, mp_context=context, initializer=start_worker, initargs=(os.getpid(),))


@contextmanager
def _cluster(address: str) -> Iterator[Executor]:
    try:
        from distributed import Client
    except ImportError:
        raise UsageError("--scheduler needs dask.distributed: pip install 'specsolve[distributed]'") from None
    try:
        client = Client(address, timeout=SCHEDULER_TIMEOUT_S)
    except (OSError, ValueError, TimeoutError) as error:
        raise UsageError(f"--scheduler {address}: no scheduler answers there ({error})") from error
    try:
        yield client.get_executor(pure=False, retries=SCHEDULER_RETRIES)
    finally:
        client.close()


@dataclass(frozen=True)
class Run:
    """One treatment of all stars.

    Attributes
    ----------
    setting : Setting
    first : tuple of Solution
        Rows before all others: the reference star.
    """

    setting: Setting
    first: tuple[Solution, ...] = ()


def stream(
    stars: Sequence[Star], grid: Any, runs: Sequence[Run], *, executor: Executor | None,
    places: Sequence[int] | None = None, then: Callable[[Solution], Any] | None = None,
) -> Iterator[tuple[int, Any]]:  # fmt: skip
    """(place, Solution) of all stars in all runs; the places of a star's runs follow each other."""
    from specsolve.balance.batch import solve_stream

    n = len(runs)
    wanted = range(len(stars) * n) if places is None else places
    for k, run in enumerate(runs):
        own = [place // n for place in wanted if place % n == k]
        for place, found in solve_stream(stars, grid, run.setting, executor=executor, places=own, then=then):
            yield place * n + k, found


def run_key(arguments: Mapping[str, Any], stars: Sequence[Star], runs: Sequence[Run], grid: Any) -> str:
    """What a journal is named by: configuration, input, zero points, grid and program."""
    from specsolve import __version__
    from specsolve.atmosphere.build import sources_hash

    zeros = [run.setting.zero_points for run in runs]
    parts = [
        arguments,
        [(star.name, star.identity) for star in stars],
        [[z.keys, z.values.tolist(), None if z.covariance is None else z.covariance.tolist()] for z in zeros],
        grid.identity,
        [__version__, sources_hash(DECIDING)],
    ]
    return hashlib.sha256(json.dumps(parts, sort_keys=True).encode()).hexdigest()


def solve_to_files(
    settings: Settings,
    stars: Sequence[Star],
    grid: Any,
    runs: Sequence[Run],
    request: Any,
    provenance: Mapping[str, Any],
) -> Outcome:
    """Solve stars and write the four tables; a run that was cut short goes on where it was.

    Parameters
    ----------
    settings : Settings
    stars, grid
        As for `specsolve.balance.batch.solve_stream`.
    runs : sequence of Run
    request : specsolve.cli.request.Request
    provenance : mapping
    """
    from specsolve.cli.progress import counting
    from specsolve.report.journal import Journal
    from specsolve.report.rows import record_of
    from specsolve.report.treatments import write_differences

    interrupted = False
    with Journal(request.output, run_key(request.arguments(), stars, runs, grid)) as journal:
        total = len(stars) * len(runs)
        left = [place for place in range(total) if place not in journal.status]
        if len(left) < total:
            settings.say(f"{journal.path}: {total - len(left)} of {total} stars are finished, going on")
        try:
            with (
                executor_for(request.workers, request.scheduler) as executor,
                counting("stars", quiet=settings.verbosity < 0, done=total - len(left)) as progress,
            ):
                found = stream(stars, grid, runs, executor=executor, places=left, then=record_of)
                _keep(found, journal, lambda: progress and progress(len(journal.status), total))
        except KeyboardInterrupt:
            interrupted = True
        except BrokenExecutor as error:
            raise SpecsolveError(
                f"a worker process died ({error or 'out of memory, or killed'}); {len(journal.status)} stars are finished "
                "and kept: run the same command again to go on"
            ) from error
        paths = journal.write_tables(provenance, [record_of(one) for run in runs for one in run.first])
        if len(runs) > 1:
            paths["differences"] = write_differences(request.output, provenance)
        settings.say("wrote " + ", ".join(str(path) for path in paths.values()))
        if not interrupted:
            journal.remove()
        return Outcome(dict(journal.status), interrupted, total)


def _keep(found: Iterator[tuple[int, Any]], journal: Any, told: Callable[[], Any]) -> None:
    """Append what the stream gives to the journal, at least every `FLUSH_S`; also what is at hand when it breaks."""
    waiting, since = [], time.monotonic()
    try:
        for item in found:
            waiting.append(item)
            if time.monotonic() - since > FLUSH_S:
                journal.append(waiting)
                waiting, since = [], time.monotonic()
                told()
    finally:
        journal.append(waiting)
        told()
