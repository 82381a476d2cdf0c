"""``specsolve solve`` of one star from a cold shell: at most 2.5 s and 400 MB, without numba."""

from __future__ import annotations

import pytest

from specsolve.grid import ResponseGrid
from tests.benchmarks.stars import invented_star, write_table
from tests.benchmarks.timing import command

pytestmark = pytest.mark.slow

TIME_LIMIT_S, MEMORY_LIMIT_MB = 2.5, 400.0
MEASURED = (
    "import sys; from specsolve.cli.main import run; code = run(sys.argv[1:]);"
    "peak = open('/proc/self/status').read().split('VmHWM:')[1].split()[0];"
    "print('PEAK', peak, 'numba' in sys.modules, file=sys.stderr); sys.exit(code)"
)


@pytest.fixture
def table(tmp_path, rng):
    return write_table(invented_star(ResponseGrid.packaged(), 100, rng), tmp_path / "star.ecsv")


def test_one_star_from_a_cold_shell(table, tmp_path, figure):
    runs = [command(["solve", str(table), "--output", f"star_{i}"], tmp_path) for i in range(4)]
    assert all(run.code == 0 for run in runs), runs[0].stderr
    processor, wall = min(run.processor for run in runs), min(run.wall for run in runs)
    nothing = min(command([], tmp_path, ("-c", "import numpy, astropy.table")).processor for _ in range(3))
    figure("solve of one star, processor time", processor, "s", limit=f"<= {TIME_LIMIT_S:g}")
    figure("solve of one star, wall time (depends on the machine's load)", wall, "s")
    figure("of which import of numpy and astropy.table alone", nothing, "s")
    assert processor <= TIME_LIMIT_S


def test_memory_of_a_solve_and_no_numba(table, tmp_path, figure):
    run = command(["solve", str(table), "--output", "star"], tmp_path, ("-c", MEASURED))
    assert run.code == 0, run.stderr
    peak, numba = run.stderr.split("PEAK")[1].split()
    figure("peak memory of a solve", int(peak) / 1024, "MB", limit=f"<= {MEMORY_LIMIT_MB:g}")
    assert int(peak) / 1024 <= MEMORY_LIMIT_MB
    assert numba == "False"
