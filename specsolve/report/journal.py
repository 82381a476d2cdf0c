"""The journal of a long run: finished stars, appended as they come, so that a killed run goes on where it was.

It stands next to the output as ``X.journal``. Its first line names the run by a key that hashes the configuration, the
input, the grid and the program; each further line is one star, as the text of its rows, after a checksum. A line that
was cut short by a crash does not count and is overwritten. When every star is there the tables are written, in the order
of the input, and the journal is removed.
"""

from __future__ import annotations

import fcntl
import json
import os
import zlib
from collections.abc import Iterable, Mapping
from contextlib import ExitStack
from dataclasses import asdict
from pathlib import Path
from typing import Any

from specsolve.durable import append_durably, output_errors, writing_aside
from specsolve.errors import LockError, StoreError
from specsolve.report.rows import Record, table_head
from specsolve.report.tables import output_paths

FORMAT_NAME = "specsolve journal"
CHECKSUM_DIGITS = 8
ENDING = ".journal"
# The star table last: where it stands, the others are complete.
ORDER = ("lines", "candidates", "decisions", "stars")


def journal_path(output: str | Path) -> Path:
    """Where the journal of an ``--output`` stands.

    Examples
    --------
    >>> str(journal_path("run/cluster.ecsv"))
    'run/cluster.journal'
    """
    return output_paths(output)["stars"].with_suffix(ENDING)


class Journal:
    """An open journal; use it in a ``with`` statement.

    Parameters
    ----------
    output : path-like
        As `specsolve.report.tables.output_paths` takes it.
    key : str
        Of the run.

    Attributes
    ----------
    status : dict of int to (star, status, reason)
        Of the finished ones, by their place in the run.

    Raises
    ------
    StoreError
        A journal of another run stands there.
    LockError
        Another living process writes to it.
    """

    def __init__(self, output: str | Path, key: str) -> None:
        self.output, self.path = output, journal_path(output)
        self.status: dict[int, tuple[str, str, str]] = {}
        self._places: dict[int, tuple[int, int]] = {}
        with output_errors(self.path):
            self._stream = open(self.path, "a+b")  # noqa: SIM115 - lives as long as the journal
        try:
            self._lock()
            self._read(key)
        except BaseException:
            self._stream.close()
            raise

    def __enter__(self) -> Journal:
        return self

    def __exit__(self, *_: Any) -> None:
        self._stream.close()

    def append(self, finished: Iterable[tuple[int, Record]]) -> None:
        """Keep finished stars, given with their places; they are on the disk when this returns."""
        content, lengths = b"", []
        start = self._end
        for place, record in finished:
            line = _line({"place": place, **asdict(record)})
            lengths.append((place, record, start + len(content), len(line)))
            content += line
        if not content:
            return
        try:
            append_durably(self._stream, content, self.path)
        except BaseException:
            os.ftruncate(self._stream.fileno(), start)
            raise
        self._end = start + len(content)
        for place, record, offset, length in lengths:
            self._places[place] = (offset, length)
            self.status[place] = (record.star, record.status, record.reason)

    def write_tables(self, provenance: Mapping[str, Any], first: Iterable[Record] = ()) -> dict[str, Path]:
        """Write the four tables from `first` and all that is in the journal, in the order of the places.

        Raises
        ------
        OutputError
            The journal stays; free some space and run the same command again.
        """
        paths = output_paths(self.output)
        with ExitStack() as stack:
            streams = {kind: stack.enter_context(writing_aside(paths[kind])) for kind in reversed(ORDER)}
            for kind, stream in streams.items():
                stream.write(table_head(kind, provenance).encode())
            for record in first:
                for kind, stream in streams.items():
                    stream.write(record.rows[kind].encode())
            for place in sorted(self._places):
                offset, length = self._places[place]
                self._stream.seek(offset)
                rows = json.loads(self._stream.read(length)[CHECKSUM_DIGITS + 1 :])["rows"]
                for kind, stream in streams.items():
                    stream.write(rows[kind].encode())
        return paths

    def remove(self) -> None:
        """Forget the run, when its tables are written."""
        self.path.unlink(missing_ok=True)

    def _lock(self) -> None:
        try:
            fcntl.flock(self._stream.fileno(), fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            raise LockError(
                f"{self.path} is being written by another run. Wait for it, or choose another --output.", path=self.path
            ) from None

    def _read(self, key: str) -> None:
        head = _line({"format": FORMAT_NAME, "key": key})
        self._stream.seek(0)
        first = self._stream.readline()
        if first != head and not (head.startswith(first) and not self._stream.read(1)):
            raise StoreError(
                f"{self.path} belongs to an unfinished run with other options, input or version. Finish it with its own "
                "command, remove it, or choose another --output.",
                path=self.path,
            )
        self._end = len(head)
        if first != head:  # new, or cut short by a crash
            os.ftruncate(self._stream.fileno(), 0)
            append_durably(self._stream, head, self.path)
            return
        for line in self._stream:
            content = _content(line)
            if content is None:
                break
            place = int(content["place"])
            self._places[place] = (self._end, len(line))
            self.status[place] = (content["star"], content["status"], content["reason"])
            self._end += len(line)
        with output_errors(self.path):
            os.ftruncate(self._stream.fileno(), self._end)


def _line(content: Mapping[str, Any]) -> bytes:
    text = json.dumps(content).encode()
    return f"{zlib.crc32(text):0{CHECKSUM_DIGITS}x} ".encode() + text + b"\n"


def _content(line: bytes) -> dict[str, Any] | None:
    """What a line holds; None if it is cut short or damaged."""
    text = line[CHECKSUM_DIGITS + 1 : -1]
    try:
        whole = line.endswith(b"\n") and int(line[:CHECKSUM_DIGITS], 16) == zlib.crc32(text)
    except ValueError:
        whole = False
    return json.loads(text) if whole else None
