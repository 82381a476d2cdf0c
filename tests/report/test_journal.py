"""The journal of a long run, killed at any moment, and its tables."""

from __future__ import annotations

import os
import signal
import sys

import numpy as np
import pytest

from specsolve.errors import LockError, StoreError
from specsolve.report.journal import Journal, journal_path
from specsolve.report.rows import Record, record_of, rows_text, table_head
from specsolve.report.tables import output_paths, read_table, tables_of, write_table
from tests.report.made_up import made_up_solution

KEY = "0123456789abcdef"
N_STARS = 12
PROVENANCE = {"command_line": "specsolve solve x", "options": {"fix": {}}}


@pytest.fixture(scope="module")
def records() -> list[Record]:
    import dataclasses

    solution = made_up_solution(np.random.default_rng(4))
    names = [f'star "{i}", invented' for i in range(N_STARS)]
    return [record_of(dataclasses.replace(solution, star=name)) for name in names]


def finish(output, records, chunk=2) -> None:
    """A run: append what is missing, last places first as workers may, write the tables, remove the journal."""
    with Journal(output, KEY) as journal:
        left = [place for place in reversed(range(len(records))) if place not in journal.status]
        for first in range(0, len(left), chunk):
            journal.append([(place, records[place]) for place in left[first : first + chunk]])
        journal.write_tables(PROVENANCE)
        journal.remove()


def bytes_of(output) -> dict[str, bytes]:
    return {kind: path.read_bytes() for kind, path in output_paths(output).items()}


def test_tables_are_those_that_the_table_writer_makes(records, tmp_path):
    import dataclasses

    finish(tmp_path / "run", records)
    assert not journal_path(tmp_path / "run").exists()
    solution = made_up_solution(np.random.default_rng(4))
    solutions = [dataclasses.replace(solution, star=record.star) for record in records]
    for kind, table in tables_of(solutions, PROVENANCE).items():
        write_table(table, tmp_path / "other.ecsv")
        assert bytes_of(tmp_path / "run")[kind].decode() == (tmp_path / "other.ecsv").read_text()
        back = read_table(output_paths(tmp_path / "run")[kind], kind)
        assert len(back) == len(table)
        for name in table.colnames:
            if table[name].dtype.kind == "f":
                np.testing.assert_array_equal(np.ma.filled(back[name], np.nan), np.asarray(table[name]))


def test_every_kill_leaves_a_run_that_ends_with_the_same_bytes(records, tmp_path, figure):
    """The process kills itself at each write, flush, rename and deletion in turn."""
    finish(tmp_path / "whole", records)
    whole = bytes_of(tmp_path / "whole")
    moments = 0
    for number in range(1000):
        output = tmp_path / f"run{number}"
        pid = os.fork()
        if pid == 0:
            try:
                kill_at(number)
                finish(output, records)
                os._exit(0)
            except BaseException as error:  # noqa: BLE001 - a forked child must never return into the parent's stack
                print(repr(error), file=sys.stderr)
                os._exit(1)
        code = os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1])
        assert code in (0, -signal.SIGKILL)
        if code == 0:
            break
        moments += 1
        finish(output, records)
        assert bytes_of(output) == whole
        assert not journal_path(output).exists()
    figure("moments at which the run was killed and went on to the same bytes", moments, source="every system call")
    assert moments > 30


def kill_at(number: int) -> None:
    """Make this process kill itself before its system call of that number, a write half done."""
    count = 0

    def killing(original, partial=None):
        def call(*args, **keywords):
            nonlocal count
            count += 1
            if count == number + 1:
                if partial is not None:
                    partial(*args)
                os.kill(os.getpid(), signal.SIGKILL)
            return original(*args, **keywords)

        return call

    from specsolve.report import journal

    def half(stream, content, path):
        stream.write(content[: len(content) // 2])
        stream.flush()

    journal.append_durably = killing(journal.append_durably, half)
    for name in ("fsync", "replace", "ftruncate", "unlink"):
        setattr(os, name, killing(getattr(os, name)))


@pytest.mark.parametrize("damage", ["cut", "flipped"])
def test_a_damaged_end_does_not_count(records, tmp_path, damage):
    output = tmp_path / "run"
    with Journal(output, KEY) as journal:
        journal.append(enumerate(records[:3]))
    path = journal_path(output)
    content = path.read_bytes()
    path.write_bytes(content[:-20] if damage == "cut" else content[:-20] + b"#" + content[-19:])
    with Journal(output, KEY) as journal:
        assert sorted(journal.status) == [0, 1]
        assert path.stat().st_size < len(content) - 20
    finish(output, records)
    finish(tmp_path / "whole", records)
    assert bytes_of(output) == bytes_of(tmp_path / "whole")


def test_journals_of_others_are_refused(records, tmp_path):
    output = tmp_path / "run"
    with Journal(output, KEY) as journal:
        journal.append([(0, records[0])])
        with pytest.raises(LockError, match="being written by another run"):
            Journal(output, KEY)
    with pytest.raises(StoreError, match="other options, input or version"):
        Journal(output, "another key")
    journal_path(output).write_text("notes of my own\n")
    with pytest.raises(StoreError, match="other options"):
        Journal(output, KEY)
    assert journal_path(output).read_text() == "notes of my own\n"


def test_text_is_quoted_as_a_reader_wants_it():
    row = {"star": ['a "b", c'], "treatment": ["lte"], "step": [3], "kind": ["x"], "subject": [""], "value": [np.nan]}
    text = rows_text("decisions", row | {"threshold": [1e-300], "outcome": ["two\nlines"], "reason": ["ok"]})
    assert text == '"a ""b"", c",lte,3,x,,nan,1e-300,"two lines",ok\n'
    assert table_head("decisions", {}).splitlines()[-1].startswith("star,treatment,step")
