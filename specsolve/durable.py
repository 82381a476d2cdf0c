"""Writing files so that a crash at any moment leaves the old one or the new one, complete."""

from __future__ import annotations

import errno
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import BinaryIO

from specsolve.errors import OutputError


@contextmanager
def output_errors(path: Path):
    """Turn the operating system's refusals to write into one clear `OutputError`."""
    try:
        yield
    except OSError as error:
        if error.errno in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG):
            why = "the disk is full. What is finished is kept: free some space and run the same command again"
        elif error.errno in (errno.EACCES, errno.EPERM, errno.EROFS):
            why = "no permission to write there. Choose another --output"
        elif isinstance(error, FileExistsError | NotADirectoryError):
            why = "it is a file, not a folder. Choose another --output"
        else:
            why = error.strerror or str(error)
        raise OutputError(f"cannot write {path}: {why}", path=path) from error


def write_atomically(path: Path, content: bytes) -> None:
    """Write aside, flush to the disk, rename over `path`, flush the folder.

    Raises
    ------
    OutputError
        Disk full, no permission; nothing is left aside.
    """
    aside = path.with_name(f"{path.name}.{os.getpid()}.aside")
    with output_errors(path):
        try:
            with open(aside, "wb") as stream:
                stream.write(content)
                stream.flush()
                os.fsync(stream.fileno())
            os.replace(aside, path)
        except OSError:
            aside.unlink(missing_ok=True)
            raise
        sync_folder(path.parent)


@contextmanager
def writing_aside(path: Path) -> Iterator[BinaryIO]:
    """As `write_atomically`, for what is written piece by piece: `path` is replaced when the block ends well.

    Raises
    ------
    OutputError
        Disk full, no permission; nothing is left aside.
    """
    aside = path.with_name(f"{path.name}.{os.getpid()}.aside")
    with output_errors(path):
        try:
            with open(aside, "wb") as stream:
                yield stream
                stream.flush()
                os.fsync(stream.fileno())
            os.replace(aside, path)
        finally:
            aside.unlink(missing_ok=True)
        sync_folder(path.parent)


def append_durably(stream: BinaryIO, content: bytes, path: Path) -> None:
    """Add to the end of an open file and flush it to the disk; a crash leaves a beginning of `content`, or all of it.

    Raises
    ------
    OutputError
    """
    with output_errors(path):
        stream.write(content)
        stream.flush()
        os.fsync(stream.fileno())


def sync_folder(folder: Path) -> None:
    """Flush the entries of a folder to the disk."""
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
