"""Kill builds with SIGKILL at chosen moments, go on, and compare the bytes; run as a program by `test_crash`.

One single-threaded process forks a child for every build, so a kill costs milliseconds. Prints one JSON object.
"""

from __future__ import annotations

import json
import os
import signal
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from specsolve.grid import plan
from specsolve.grid.build import build_grid
from specsolve.grid.store import ResponseGrid
from tests.grid.double import ENGINE, Atmospheres
from tests.grid.synthetic import synthetic_lines


def content(directory: Path) -> dict[str, bytes]:
    """Name and bytes of every file."""
    return {str(p.relative_to(directory)): p.read_bytes() for p in sorted(directory.rglob("*")) if p.is_file()}


def build(directory: Path) -> None:
    build_grid(synthetic_lines(30, 6), directory, atmospheres=Atmospheres(), engine=ENGINE)


def in_child(action) -> int:
    """Run an action in a forked child and return the child's number."""
    pid = os.fork()
    if pid == 0:
        try:
            action()
            os._exit(0)
        except BaseException as error:  # noqa: BLE001 - a forked child must never return into the parent's stack
            print(repr(error), file=sys.stderr)
            os._exit(1)
    return pid


def exit_code(pid: int) -> int:
    return os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1])


def finish_and_compare(directory: Path, whole: dict[str, bytes]) -> bool:
    """Run the build again to its end; True if the directory then holds exactly the undisturbed bytes."""
    return exit_code(in_child(lambda: build(directory))) == 0 and content(directory) == whole


def kill_at_random_moments(root: Path, whole: dict[str, bytes], seconds: float, seed: int) -> dict:
    """Twenty builds, each killed at a random moment of its run time, and one killed again and again."""
    rng = np.random.default_rng(seed)
    tried, equal, interrupted, stages = 0, 0, 0, set()
    while interrupted < 20:
        directory = root / f"random{tried}"
        pid = in_child(lambda directory=directory: build(directory))
        time.sleep(rng.uniform(0.0, seconds))
        os.kill(pid, signal.SIGKILL)
        interrupted += exit_code(pid) == -signal.SIGKILL  # not if it had ended before
        stages.add(len(list(directory.glob("parts-*/*.npy"))) if directory.exists() else -1)
        equal += finish_and_compare(directory, whole)
        tried += 1
    directory = root / "again_and_again"
    for _ in range(20):
        pid = in_child(lambda: build(directory))
        time.sleep(rng.uniform(0.0, 0.2 * seconds))
        os.kill(pid, signal.SIGKILL)
        os.waitpid(pid, 0)
    return {
        "tried": tried,
        "equal": equal,
        "interrupted": interrupted,
        "different_stages": len(stages),
        "again_and_again_equal": finish_and_compare(directory, whole),
    }


def kill_at_every_rename(root: Path, whole: dict[str, bytes]) -> dict:
    """Kill before and after every rename, and before every deletion of a file or folder."""
    tried, equal = 0, 0
    for when in ("before", "after", "delete"):
        for number in range(10_000):
            directory = root / f"{when}{number}"

            def action(directory=directory, when=when, number=number) -> None:
                kill_in(when, number)
                build(directory)

            if exit_code(in_child(action)) != -signal.SIGKILL:
                break
            tried += 1
            equal += finish_and_compare(directory, whole)
    return {"tried": tried, "equal": equal}


def kill_in(when: str, number: int) -> None:
    """Make this process kill itself around its rename or deletion of that number."""
    replace, unlink, count = os.replace, os.unlink, 0

    def reached() -> bool:
        nonlocal count
        count += 1
        return count == number + 1

    def killing_replace(*args, **kwargs):
        now = reached()
        if now and when == "before":
            os.kill(os.getpid(), signal.SIGKILL)
        replace(*args, **kwargs)
        if now:
            os.kill(os.getpid(), signal.SIGKILL)

    def killing_unlink(*args, **kwargs):
        if reached():
            os.kill(os.getpid(), signal.SIGKILL)
        unlink(*args, **kwargs)

    if when == "delete":
        os.unlink = killing_unlink
    else:
        os.replace = killing_replace


def main(mode: str, seed: int) -> dict:
    with tempfile.TemporaryDirectory() as name:
        root = Path(name)
        plan.LINES_PER_PART = (
            36 if mode == "random" else 180
        )  # one node a part: many moments; fewer where all are tried
        started = time.monotonic()
        build(root / "whole")
        seconds = time.monotonic() - started
        whole = content(root / "whole")
        ResponseGrid.open(root / "whole")
        if mode == "random":
            return {"files": len(whole), **kill_at_random_moments(root, whole, seconds, seed)}
        return {"files": len(whole), **kill_at_every_rename(root, whole)}


if __name__ == "__main__":
    print(json.dumps(main(sys.argv[1], int(sys.argv[2]))))
