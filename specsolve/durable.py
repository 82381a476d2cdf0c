"""Writing files so that a crash at any moment leaves the old one or the new one, complete."""

from __future__ import annotations

import errno
import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import BinaryIO

from specsolve.errors import OutputError, StoreError


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


def claim_parts(parts: Path, key: str, made_of: str) -> None:
    """Make the folder of a build's parts, or go on in it if it was begun with the same key.

    Parameters
    ----------
    parts : Path
    key : str
        Hash of all that the parts depend on.
    made_of : str
        What the key stands for, in words: "configuration or version".

    Raises
    ------
    StoreError
        The folder holds parts of a build with another key; nothing is mixed.
    OutputError
    """
    with output_errors(parts.parent):
        parts.mkdir(parents=True, exist_ok=True)
    stamp = parts / "key"
    if not stamp.exists():
        write_atomically(stamp, key.encode())
    elif stamp.read_text() != key:
        raise StoreError(
            f"{parts}: holds nodes of a build with another {made_of}. Remove the folder, or use another --output.",
            path=str(parts),
        )


def sync_folder(folder: Path) -> None:
    """Flush the entries of a folder to the disk."""
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(descriptor)
    finally:
        os.close(descriptor)
