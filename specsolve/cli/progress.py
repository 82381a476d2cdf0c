"""The progress of a long run on stderr, with the remaining time: a bar on a terminal, now and then a line elsewhere."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

import click

LINE_EVERY_S = 30.0  # where stderr is no terminal


@contextmanager
def counting(what: str, *, quiet: bool = False, done: int = 0) -> Iterator[Callable[[int, int], None] | None]:
    """Give a function (done, total) that shows the progress of `what`; `None` if quiet.

    Parameters
    ----------
    what : str
    quiet : bool
    done : int
        Finished before this run began; the remaining time is that of the others.
    """
    if quiet:
        yield None
        return
    if not sys.stderr.isatty():
        yield _lines(what, done)
        return
    from rich.console import Console
    from rich.progress import (
        BarColumn,
        MofNCompleteColumn,
        Progress,
        TextColumn,
        TimeElapsedColumn,
        TimeRemainingColumn,
    )

    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TimeElapsedColumn(),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=Console(stderr=True)) as bar:
        task = bar.add_task(what, total=None, completed=done)
        yield lambda done, total: bar.update(task, completed=done, total=total)


def _lines(what: str, first: int) -> Callable[[int, int], None]:
    start = latest = time.monotonic()

    def tell(done: int, total: int) -> None:
        nonlocal latest
        now = time.monotonic()
        if now - latest < LINE_EVERY_S or done <= first:
            return
        latest = now
        seconds = (now - start) / (done - first) * (total - done)
        click.echo(f"{done} of {total} {what}, about {duration(seconds)} left", err=True)

    return tell


def duration(seconds: float) -> str:
    """A time in words.

    Examples
    --------
    >>> duration(40), duration(400), duration(40000)
    ('40 s', '7 min', '11.1 h')
    """
    if seconds < 90.0:
        return f"{seconds:.0f} s"
    return f"{seconds / 60.0:.0f} min" if seconds < 5400.0 else f"{seconds / 3600.0:.1f} h"
