"""A run of many made-up stars in a process of its own, for tests that kill it."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np
from astropy.table import vstack

from specsolve.grid.store import ResponseGrid
from tests.cli.made_up_stars import star_table

RANGES = ((4600.0, 6300.0), (2.0, 4.6), (-1.2, 0.2), (0.8, 1.8))
BAD = 7  # every so manieth star has no usable line
JOURNAL_FROM = 8  # in these runs; few stars take the plain path, which compiles nothing
# A run started in the background of a script ignores Ctrl-C by inheritance; here it shall be heard.
HEAR = "import signal; signal.signal(signal.SIGINT, signal.default_int_handler)"
PROGRAM = f"{HEAR}; from specsolve.cli import bulk, main; bulk.JOURNAL_FROM = {JOURNAL_FROM}; main.main()"


def write_many(path: Path, grid: ResponseGrid, n_stars: int, rng: np.random.Generator) -> Path:
    """A table of stars drawn at random."""
    tables = []
    for number in range(n_stars):
        theta = [rng.uniform(*limits) for limits in RANGES]
        table = star_table(grid.lines, f"star {number}", theta, rng)
        if number % BAD == BAD - 1:
            table = table[:3]
        tables.append(table)
    vstack(tables, metadata_conflicts="silent").write(path, format="ascii.ecsv")
    return path


def command(table: Path, grid: ResponseGrid, output: Path, *further: str) -> list[str]:
    """Arguments of the run."""
    return ["solve", str(table), "--grid", str(grid.directory), "--output", str(output), *further]


def start(*arguments) -> subprocess.Popen:
    """The run in a process group of its own."""
    return subprocess.Popen(
        [sys.executable, "-c", PROGRAM, *command(*arguments)],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )


def rows(output: Path) -> dict[str, list[str]]:
    """Rows of the four files, without their heads (the command line and the time differ)."""
    found = {}
    for ending in ("", "_lines", "_candidates", "_decisions"):
        lines = output.with_name(f"{output.name}{ending}.ecsv").read_text().splitlines()
        found[ending] = [line for line in lines if not line.startswith("#")]
    return found
