"""Processor time, best of several runs: what else the machine does then counts little."""

from __future__ import annotations

import os
import resource
import subprocess
import sys
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]


def best(function: Callable[[], Any], repeats: int = 3) -> float:
    """Least processor time of a call [s]; call once before for what is compiled or cached."""
    took = []
    for _ in range(repeats):
        start = time.process_time()
        function()
        took.append(time.process_time() - start)
    return min(took)


@dataclass(frozen=True)
class Run:
    """A command that ended: processor time [s], wall time [s], exit code, output."""

    processor: float
    wall: float
    code: int
    stdout: str
    stderr: str


def command(arguments: Sequence[str], folder: Path, python: Sequence[str] = ("-m", "specsolve")) -> Run:
    """Run ``python -m specsolve ...`` in a process of its own, with one thread of linear algebra."""
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"}
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    start = time.perf_counter()
    done = subprocess.run(
        [sys.executable, *python, *arguments],
        cwd=folder,
        env=environment,
        capture_output=True,
        text=True,
        timeout=600,
        check=False,
    )
    wall = time.perf_counter() - start
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    processor = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
    return Run(processor, wall, done.returncode, done.stdout, done.stderr)
