"""Builds killed with SIGKILL end, when started again, with the bytes of an undisturbed build."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from tests.grid.killing import content
from tests.grid.test_build import LINES, build

ROOT = Path(__file__).resolve().parents[2]


def killing(mode: str, seed: int) -> dict:
    environment = os.environ | {"OPENBLAS_NUM_THREADS": "1"}
    done = subprocess.run(
        [sys.executable, "-m", "tests.grid.killing", mode, str(seed)],
        cwd=ROOT, env=environment, capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout)


@pytest.mark.slow
def test_killed_at_twenty_random_moments(seed):
    result = killing("random", seed)
    assert result["interrupted"] == 20
    assert result["equal"] == result["tried"] >= 20
    assert result["different_stages"] >= 5
    assert result["again_and_again_equal"]


def test_killed_at_every_rename_and_deletion(seed):
    result = killing("every", seed)
    assert result["tried"] >= 20
    assert result["equal"] == result["tried"]


@pytest.mark.slow
def test_workers_of_a_killed_build_end_and_the_build_goes_on(tmp_path):
    code = (
        "from specsolve.grid import plan\n"
        "plan.LINES_PER_PART = 36\n"
        "from tests.grid.test_build import LINES, build\n"
        "if __name__ == '__main__':\n"
        f"    target = {str(tmp_path / 'grid')!r}\n"
        "    build(LINES, target, workers=2, progress=lambda done, total: print(done, flush=True))\n"
    )
    script = tmp_path / "script.py"
    script.write_text(code)
    environment = os.environ | {"PYTHONPATH": str(ROOT)}
    process = subprocess.Popen([sys.executable, str(script)], env=environment, stdout=subprocess.PIPE, text=True)
    for line in process.stdout:
        if int(line) >= 2:
            break
    workers = children_of(process.pid)
    process.send_signal(signal.SIGKILL)
    process.stdout.close()
    process.wait()
    assert workers
    deadline = time.monotonic() + 10.0
    while any(alive(pid) for pid in workers) and time.monotonic() < deadline:
        time.sleep(0.1)
    assert not any(alive(pid) for pid in workers)
    build(LINES, tmp_path / "grid")
    build(LINES, tmp_path / "undisturbed")
    assert content(tmp_path / "grid") == content(tmp_path / "undisturbed")


def children_of(pid: int) -> list[int]:
    """Processes whose parent is `pid`."""
    found = []
    for entry in Path("/proc").iterdir():
        if entry.name.isdigit():
            try:
                parent = int((entry / "stat").read_text().rpartition(")")[2].split()[1])
            except (OSError, ValueError):
                continue
            if parent == pid:
                found.append(int(entry.name))
    return found


def alive(pid: int) -> bool:
    try:
        return (Path("/proc") / str(pid) / "stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except OSError:
        return False
