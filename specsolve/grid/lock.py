"""One writer at a time: a lock file with the writer's process number, freed by the system when the writer dies."""

from __future__ import annotations

import fcntl
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from specsolve.durable import output_errors
from specsolve.errors import LockError

LOCK_NAME = "build.lock"


@contextmanager
def exclusive(directory: Path) -> Iterator[None]:
    """Hold the lock of a grid directory.

    The lock belongs to the open file, not to its existence: a file left by a killed process locks nobody out.

    Raises
    ------
    LockError
        Another living process holds it; `pid` says which.
    """
    path = directory / LOCK_NAME
    with output_errors(path):
        descriptor = _open_current(path)
    try:
        os.ftruncate(descriptor, 0)
        os.pwrite(descriptor, f"{os.getpid()}\n".encode(), 0)
        yield
    finally:
        path.unlink(missing_ok=True)
        os.close(descriptor)


def _open_current(path: Path) -> int:
    """Open and lock the file that stands at `path`, not one that its holder has just removed."""
    while True:
        descriptor = os.open(path, os.O_RDWR | os.O_CREAT, 0o644)
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except BlockingIOError:
            text = os.pread(descriptor, 32, 0).decode(errors="replace").strip()
            os.close(descriptor)
            pid = int(text) if text.isdigit() else None
            raise LockError(
                f"{path.parent} is being written by another process (pid {text or 'unknown'}). "
                "Wait for it, or choose another --output.",
                path=path,
                pid=pid,
            ) from None
        except OSError:
            os.close(descriptor)
            raise
        try:
            if os.stat(path).st_ino == os.fstat(descriptor).st_ino:
                return descriptor
        except FileNotFoundError:
            pass
        os.close(descriptor)
