"""Runs of many stars that are killed and go on: one process, several, and a cluster."""

from __future__ import annotations

import os
import signal
import time

import numpy as np
import pytest

from specsolve.cli import bulk
from specsolve.cli import main as cli
from specsolve.cli.progress import duration
from specsolve.errors import EXIT_INTERRUPTED, EXIT_NO_INPUT, EXIT_UNSOLVED, EXIT_USAGE
from specsolve.report.tables import read_table
from tests.cli.made_up_run import BAD, JOURNAL_FROM, command, rows, start, write_many

N_STARS = 28
PATIENCE_S = 600


@pytest.fixture(scope="module")
def small_run(tmp_path_factory, made_up_grid):
    """A table of stars and the rows of its undisturbed run."""
    folder = tmp_path_factory.mktemp("bulk")
    table = write_many(folder / "stars.ecsv", made_up_grid, N_STARS, np.random.default_rng(12))
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(bulk, "JOURNAL_FROM", JOURNAL_FROM)
        assert cli.run(command(table, made_up_grid, folder / "whole", "--quiet")) == EXIT_UNSOLVED
    return table, rows(folder / "whole")


def finish(table, grid, output, *further) -> str:
    process = start(table, grid, output, *further)
    _, words = process.communicate(timeout=PATIENCE_S)
    assert process.returncode == EXIT_UNSOLVED, words
    return words


def finished(output) -> int:
    """Stars in the journal."""
    path = output.with_suffix(".journal")
    return path.read_bytes().count(b"\n") - 1 if path.exists() else 0


def test_every_star_once_and_bad_ones_with_their_reason(small_run, made_up_grid):
    _, whole = small_run
    stars = [line.split(",")[0] for line in whole[""][1:]]
    assert stars == [f"star {number}" for number in range(N_STARS)]
    for number in range(BAD - 1, N_STARS, BAD):
        assert "too few usable lines" in whole[""][1 + number]


def test_a_killed_run_goes_on(small_run, made_up_grid, tmp_path):
    table, whole = small_run
    output = tmp_path / "run"
    process = start(table, made_up_grid, output)
    deadline = time.monotonic() + PATIENCE_S
    while finished(output) < 2 and process.poll() is None and time.monotonic() < deadline:
        time.sleep(0.02)
    os.killpg(process.pid, signal.SIGKILL)
    process.communicate()
    kept = finished(output)
    assert 0 < kept < N_STARS
    assert not output.with_name("run.ecsv").exists()
    refused = start(table, made_up_grid, output, "--fix", "logg=4.0")
    _, words = refused.communicate(timeout=PATIENCE_S)
    assert refused.returncode == EXIT_NO_INPUT
    assert "unfinished run with other options" in words
    words = finish(table, made_up_grid, output)
    assert f"{kept} of {N_STARS} stars are finished, going on" in words
    assert rows(output) == whole
    assert not output.with_suffix(".journal").exists()


def test_ctrl_c_writes_what_is_finished_and_goes_on(small_run, made_up_grid, tmp_path):
    table, whole = small_run
    output = tmp_path / "run"
    process = start(table, made_up_grid, output)
    while finished(output) < 2 and process.poll() is None:
        time.sleep(0.02)
    process.send_signal(signal.SIGINT)
    _, words = process.communicate(timeout=PATIENCE_S)
    assert process.returncode == EXIT_INTERRUPTED, words
    assert "are finished and kept" in words
    assert 2 <= len(read_table(f"{output}.ecsv", "stars")) < N_STARS
    finish(table, made_up_grid, output)
    assert rows(output) == whole


@pytest.mark.slow
def test_a_thousand_stars_killed_at_random_moments(made_up_grid, tmp_path, seed, slow_fraction, figure):
    """Two workers; the whole process group is killed again and again."""
    n_stars = 1000 if slow_fraction >= 1.0 else 200
    rng = np.random.default_rng(seed)
    table = write_many(tmp_path / "stars.ecsv", made_up_grid, n_stars, rng)
    began = time.monotonic()
    finish(table, made_up_grid, tmp_path / "whole", "--workers", "2")
    seconds = time.monotonic() - began
    whole = rows(tmp_path / "whole")
    figure("stars per second, table to table, 2 workers, start included", n_stars / seconds, "1/s")
    output, kills = tmp_path / "run", 0
    for _ in range(8):
        process = start(table, made_up_grid, output, "--workers", "2")
        time.sleep(rng.uniform(0.15, 0.6) * seconds)
        if process.poll() is None:
            os.killpg(process.pid, signal.SIGKILL)
            kills += 1
        process.communicate()
    finish(table, made_up_grid, output, "--workers", "2")
    assert rows(output) == whole
    assert len({line.split(",")[0] for line in whole[""][1:]}) == n_stars == len(whole[""]) - 1
    figure("kills of a run that went on to the same numbers", kills, source=f"{n_stars} stars")
    assert kills >= 2


def test_workers_end_with_a_killed_parent(small_run, made_up_grid, tmp_path):
    table, _ = small_run
    process = start(table, made_up_grid, tmp_path / "run", "--workers", "2")
    while finished(tmp_path / "run") < 1 and process.poll() is None:
        time.sleep(0.02)
    os.kill(process.pid, signal.SIGKILL)
    process.communicate(timeout=30)  # the pipes close when the last worker has ended


@pytest.mark.slow
def test_a_cluster_gives_the_same_numbers_though_a_worker_is_killed(small_run, made_up_grid, tmp_path, monkeypatch):
    distributed = pytest.importorskip("distributed")
    from concurrent.futures import ThreadPoolExecutor

    monkeypatch.setenv("PYTHONWARNINGS", "ignore")
    table, whole = small_run
    output = tmp_path / "run"
    with distributed.LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=None, processes=True) as cluster:
        address = cluster.scheduler_address
        with ThreadPoolExecutor(1) as beside:
            run = beside.submit(finish, table, made_up_grid, output, "--scheduler", address)
            while finished(output) < 2 and not run.done():
                time.sleep(0.02)
            killed_at = finished(output)
            victim = next(iter(cluster.workers.values()))
            os.kill(victim.pid, signal.SIGKILL)
            run.result(timeout=PATIENCE_S)
    assert 0 < killed_at < N_STARS
    assert rows(output) == whole


def test_a_scheduler_that_is_not_there(small_run, made_up_grid, tmp_path, monkeypatch, capsys):
    pytest.importorskip("distributed")
    monkeypatch.setattr(bulk, "SCHEDULER_TIMEOUT_S", 1)
    table, _ = small_run
    arguments = command(table, made_up_grid, tmp_path / "run", "--scheduler", "tcp://127.0.0.1:9")
    assert cli.run(arguments) == EXIT_USAGE
    assert "no scheduler answers there" in capsys.readouterr().err
    assert cli.run([*arguments, "--workers", "2"]) == EXIT_USAGE


def test_times_in_words():
    assert duration(89.0) == "89 s"
    assert duration(3000.0) == "50 min"
