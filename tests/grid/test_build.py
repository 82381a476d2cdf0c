"""Building grids with a fast engine double: completeness, extension, taking over, refusals."""

from __future__ import annotations

import errno
import os
import resource
import subprocess
import sys
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest

from specsolve import durable
from specsolve.errors import InputError, LockError, MissingNodeError, OutputError, SpecsolveError, StoreError
from specsolve.grid import Interpolator
from specsolve.grid import build as build_module
from specsolve.grid.build import build_grid
from specsolve.grid.codes import MISSING, encode
from specsolve.grid.lock import LOCK_NAME, exclusive
from specsolve.grid.plan import plan_build
from specsolve.grid.store import HEADER_NAME
from tests.grid.double import BROKEN, ENGINE, SHIFTED, Atmospheres
from tests.grid.killing import content
from tests.grid.synthetic import synthetic_lines, synthetic_log_widths

LINES = synthetic_lines(30, 6)
ROOT = Path(__file__).resolve().parents[2]


def build(lines, directory, **further):
    return build_grid(lines, directory, **({"atmospheres": Atmospheres(), "engine": ENGINE} | further))


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    return build(LINES, tmp_path_factory.mktemp("whole") / "grid")


@pytest.fixture
def unsorted():
    order = np.random.default_rng(3).permutation(len(LINES))
    return LINES.select(order)


def test_every_node_holds_what_the_engine_computes(whole):
    assert whole.lines.key.tolist() == LINES.key.tolist()
    nodes = np.argwhere(whole.node_valid("lte"))
    codes = whole.gather("lte", tuple(nodes.T), np.arange(len(LINES)))
    for k, node in enumerate(nodes):
        at = [axis.values[i] for axis, i in zip(whole.node_axes, node, strict=True)]
        truth = synthetic_log_widths(LINES, *at, *np.meshgrid(whole.axes["vmic"], whole.axes["dA"], indexing="ij"))
        assert np.array_equal(codes[k], encode(np.moveaxis(truth, -1, 0)))


def test_a_failed_node_is_missing_with_its_reason_and_never_filled(whole):
    assert whole.missing("lte") == {(0, 2, 0): "failed (not converged after 120 iterations)"}
    failed = whole.gather("lte", tuple(np.array([[0], [2], [0]])), np.arange(len(LINES)))
    assert (failed == MISSING).all()


def test_nothing_but_header_and_blocks_is_left(whole):
    assert sorted(p.name for p in whole.directory.iterdir()) == [HEADER_NAME, "lte_000.npy", "lte_001.npy"]


def test_line_order_and_workers_do_not_change_a_byte(whole, unsorted, tmp_path):
    build(unsorted, tmp_path / "unsorted")
    with ThreadPoolExecutor(3) as executor:
        build(LINES, tmp_path / "threads", executor=executor)
    for name in ("unsorted", "threads"):
        assert content(tmp_path / name) == content(whole.directory)


@pytest.mark.slow
def test_worker_processes_do_not_change_a_byte(whole, tmp_path):
    build(LINES, tmp_path / "processes", workers=2)
    assert content(tmp_path / "processes") == content(whole.directory)


def test_progress_counts_nodes_to_the_end(tmp_path):
    seen = []
    build(LINES, tmp_path / "grid", progress=lambda done, total: seen.append((done, total)))
    assert seen[0] == (0, 29)
    assert seen[-1] == (29, 29)
    assert [done for done, _ in seen] == sorted(done for done, _ in seen)


def test_new_lines_are_appended_as_blocks_and_old_ones_stay(whole, tmp_path):
    first = build(LINES.select(slice(0, 10)), tmp_path / "grid")
    old = content(first.directory)
    second = build(LINES, tmp_path / "grid")
    assert content(second.directory)["lte_000.npy"] == old["lte_000.npy"]
    assert [(b.first_line, b.n_lines) for b in second.blocks] == [(0, 10), (10, 26)]
    assert sorted(second.lines.key) == sorted(LINES.key)
    theta = (5600.0, 4.2, -0.2, 1.3)
    ours = Interpolator(second, "lte", second.locate(LINES.key)).curves(theta)[0]
    assert np.array_equal(ours, Interpolator(whole).curves(theta)[0], equal_nan=True)


def test_building_what_is_there_changes_nothing(whole, tmp_path):
    calls = []
    build(LINES, tmp_path / "grid")
    before = content(tmp_path / "grid")
    build(LINES.select([3, 4]), tmp_path / "grid", progress=lambda *numbers: calls.append(numbers))
    assert content(tmp_path / "grid") == before
    assert not calls


def test_lines_of_another_grid_are_taken_over(whole, tmp_path):
    plan = plan_build(LINES, tmp_path / "grid", Atmospheres(), {}, "lte", [whole], ENGINE)
    assert plan.computed.size == 0
    assert len(plan.taken) == len(LINES)
    extra = synthetic_lines(3, 1, seed=99)
    lines = LINES.joined(extra).sorted()
    made = build(lines, tmp_path / "grid", others=[whole])
    fresh = build(lines, tmp_path / "fresh")
    for ours, theirs in zip(made.blocks, fresh.blocks, strict=True):
        assert ours.sha256 == theirs.sha256
    assert made.header["builds"][0]["taken_over"] == len(LINES)
    assert made.header["builds"][0]["computed"] == len(extra)


def test_a_subset_of_nodes_is_taken_over_too(whole, tmp_path):
    chosen = {"teff": [5250.0, 5500.0], "mh": [0.0], "vmic": [0.5, 1.5, 2.0]}
    made = build(LINES, tmp_path / "taken", others=[whole], **chosen)
    fresh = build(LINES, tmp_path / "fresh", **chosen)
    assert made.header["builds"][0]["computed"] == 0
    assert [b.sha256 for b in made.blocks] == [b.sha256 for b in fresh.blocks]


@pytest.mark.parametrize("change", ["log_gf", "broadening_sigma"])
def test_a_line_with_other_numbers_is_computed(whole, tmp_path, change):
    values = np.array(getattr(LINES, change))
    values[5] = 0.123
    plan = plan_build(
        LINES.with_columns(**{change: values}), tmp_path / "grid", Atmospheres(), {}, "lte", [whole], ENGINE
    )
    assert plan.computed.tolist() == [5]


def test_other_atmospheres_or_another_engine_are_not_taken_over(whole, tmp_path):
    for atmospheres, engine in ((Atmospheres("b" * 64), ENGINE), (Atmospheres(), SHIFTED)):
        plan = plan_build(LINES, tmp_path / "grid", atmospheres, {}, "lte", [whole], engine)
        assert plan.computed.size == len(LINES)


def test_a_grid_is_not_extended_by_what_does_not_fit(tmp_path):
    build(LINES.select(slice(0, 10)), tmp_path / "grid")
    before = content(tmp_path / "grid")
    for wrong in (
        {"teff": [5250.0, 5500.0]},
        {"vmic": [0.0, 1.0, 2.0]},
        {"atmospheres": Atmospheres("b" * 64)},
        {"engine": SHIFTED},
    ):
        with pytest.raises(StoreError, match=r"[cC]hoose another --output"):
            build(LINES, tmp_path / "grid", **wrong)
    assert content(tmp_path / "grid") == before


def test_conflicting_log_gf_of_a_line_in_the_grid_is_reported(tmp_path):
    build(LINES, tmp_path / "grid")
    other = LINES.with_columns(log_gf=LINES.log_gf + np.where(np.arange(len(LINES)) == 7, 0.2, 0.0))
    plan = plan_build(other, tmp_path / "grid", Atmospheres(), {}, "lte", [], ENGINE)
    assert len(plan.remarks) == 1
    assert LINES.key[7] in plan.remarks[0]


def test_parts_of_another_build_are_neither_used_nor_deleted(tmp_path, monkeypatch):
    def stop(*_):
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr(build_module, "merge", stop)
        with pytest.raises(KeyboardInterrupt):
            build(LINES, tmp_path / "grid")
    parts = content(tmp_path / "grid")
    assert parts
    for other in ({"teff": [5250.0, 5500.0]}, {"engine": SHIFTED}, {"atmospheres": Atmospheres("b" * 64)}):
        with pytest.raises(StoreError, match="unfinished build"):
            build(LINES, tmp_path / "grid", **other)
    with pytest.raises(StoreError, match="unfinished build"):
        build(LINES.select(slice(1, None)), tmp_path / "grid")
    assert content(tmp_path / "grid") == parts


def test_a_damaged_part_is_computed_again(whole, tmp_path, monkeypatch):
    def stop(*_):
        raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr(build_module, "merge", stop)
        with pytest.raises(KeyboardInterrupt):
            build(LINES, tmp_path / "grid")
    first, second = sorted((tmp_path / "grid").glob("parts-*/*.npy"))
    damaged = bytearray(first.read_bytes())
    damaged[-1] ^= 1
    first.write_bytes(damaged)
    second.write_bytes(second.read_bytes()[:100])
    (second.parent / "00000-note.aside").write_bytes(b"left by a killed process")
    build(LINES, tmp_path / "grid")
    assert content(tmp_path / "grid") == content(whole.directory)


def test_an_interrupt_keeps_finished_parts(whole, tmp_path, monkeypatch):
    monkeypatch.setattr("specsolve.grid.plan.LINES_PER_PART", 36)

    def interrupt(done, total):
        if done >= 5:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        build(LINES, tmp_path / "grid", progress=interrupt)
    assert len(list((tmp_path / "grid").glob("parts-*/*.npy"))) == 5
    seen = []
    build(LINES, tmp_path / "grid", progress=lambda done, total: seen.append(done))
    assert seen[0] == 5
    assert content(tmp_path / "grid") == content(whole.directory)


def test_a_second_builder_is_locked_out_and_told_by_whom(tmp_path):
    (tmp_path / "grid").mkdir()
    with exclusive(tmp_path / "grid"):
        with pytest.raises(LockError, match=str(os.getpid())) as caught:
            build(LINES, tmp_path / "grid")
        assert caught.value.pid == os.getpid()
    build(LINES, tmp_path / "grid")


def test_a_lock_file_left_by_a_dead_process_locks_nobody_out(tmp_path):
    (tmp_path / "grid").mkdir()
    (tmp_path / "grid" / LOCK_NAME).write_text("4194305\n")
    build(LINES, tmp_path / "grid")
    assert not (tmp_path / "grid" / LOCK_NAME).exists()


def test_an_engine_failure_names_the_node(tmp_path):
    with pytest.raises(SpecsolveError, match=r"teff 5750, logg 3\.5, mh -0\.5: the temperature leaves the table"):
        build(LINES, tmp_path / "grid", engine=BROKEN)
    assert not (tmp_path / "grid" / HEADER_NAME).exists()


def test_bad_requests_are_refused(tmp_path):
    with pytest.raises(InputError, match="empty"):
        build(LINES.select([]), tmp_path / "grid")
    with pytest.raises(InputError, match="treatment 'best' is unknown"):
        build(LINES, tmp_path / "grid", treatment="best", engine=None)
    with pytest.raises(InputError, match="4800"):
        build(LINES, tmp_path / "grid", teff=[4800.0])
    with pytest.raises(InputError, match="none of the chosen nodes"):
        build(LINES, tmp_path / "grid", teff=[5000.0], logg=[4.5], mh=[-0.5])


@pytest.mark.parametrize("which", ["parts-", "lte_000", HEADER_NAME])
def test_a_full_disk_is_told_keeps_what_is_finished_and_the_build_goes_on(whole, tmp_path, monkeypatch, which):
    """Whatever file is hit: a part, a block, the header."""
    real = os.replace

    def full(source, target):
        if which in str(target):
            raise OSError(errno.ENOSPC, "No space left on device")
        real(source, target)

    with monkeypatch.context() as patch:
        patch.setattr(durable.os, "replace", full)
        with pytest.raises(OutputError, match="disk is full"):
            build(LINES, tmp_path / "grid")
    assert not list((tmp_path / "grid").rglob("*.aside"))
    assert not (tmp_path / "grid" / HEADER_NAME).exists()
    build(LINES, tmp_path / "grid")
    assert content(tmp_path / "grid") == content(whole.directory)


def test_a_file_size_limit_of_the_system_ends_in_one_clear_error(tmp_path):
    code = (
        "import resource, signal\n"
        "from tests.grid.test_build import LINES, build\n"
        "from specsolve.errors import OutputError\n"
        "signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (20000, 20000))\n"
        "try:\n"
        f"    build(LINES, {str(tmp_path / 'grid')!r})\n"
        "except OutputError as error:\n"
        "    print(error)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, cwd=ROOT, check=False)
    assert "disk is full" in done.stdout, done.stderr
    assert resource.getrlimit(resource.RLIMIT_FSIZE)[0] != 20000


def test_a_disk_that_cannot_hold_the_grid_is_refused_before_the_work(tmp_path, monkeypatch):
    monkeypatch.setattr(build_module.shutil, "disk_usage", lambda path: type("Usage", (), {"free": 1000})())
    calls = []
    with pytest.raises(OutputError, match="the disk has"):
        build(LINES, tmp_path / "grid", progress=lambda *numbers: calls.append(numbers))
    assert not calls


@pytest.mark.parametrize("number", [errno.EACCES, errno.EROFS])
def test_an_output_that_cannot_be_written_is_told(tmp_path, monkeypatch, number):
    def refuse(self, *args, **kwargs):
        raise OSError(number, os.strerror(number))

    monkeypatch.setattr(Path, "mkdir", refuse)
    with pytest.raises(OutputError, match="no permission"):
        build(LINES, tmp_path / "grid")


def test_an_output_that_is_a_file_is_told(tmp_path):
    (tmp_path / "grid").write_text("a file")
    for target in (tmp_path / "grid", tmp_path / "grid" / "below"):
        with pytest.raises(OutputError, match="it is a file"):
            build(LINES, target)


def test_the_atmospheres_double_behaves_like_the_store():
    with pytest.raises(MissingNodeError):
        Atmospheres().get(5000.0, 4.5, -0.5)
