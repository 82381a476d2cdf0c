"""Part files of a build: the codes of a few nodes each, on disk as soon as they are computed.

A part is called ``NNNNN-DIGEST.npy`` with the first half of the sha256 of its bytes in the name, so that one rename
makes number, content and checksum appear together.
"""

from __future__ import annotations

import hashlib
import re
import shutil
from pathlib import Path

import numpy as np

from specsolve.durable import output_errors, write_atomically
from specsolve.errors import StoreError
from specsolve.grid.codes import CODE_TYPE
from specsolve.grid.write import npy_bytes

FOLDER = re.compile(r"parts-([0-9a-f]{64})")
NAME = re.compile(r"(\d{5,})-([0-9a-f]{32})\.npy")


class Parts:
    """The part files of one build, in ``DIRECTORY/parts-KEY``.

    Parameters
    ----------
    directory : Path
        Of the grid.
    key : str
        Hash of all that decides the numbers (64 hexadecimal digits).
    shapes : list of tuple
        Shape of every part, (n_nodes, n_lines, n_vmic, n_dA).

    Raises
    ------
    StoreError
        The directory holds parts of a build with another key: they are neither used nor deleted.
    """

    def __init__(self, directory: Path, key: str, shapes: list[tuple[int, ...]]):
        others = [found for found in part_folders(directory) if found != key]
        if others:
            raise StoreError(
                f"{directory} holds an unfinished build of other lines, nodes, atmospheres or program version "
                f"(parts-{others[0][:8]}...). Finish that one with its own command, remove its folder, or choose "
                "another --output.",
                path=directory,
            )
        self.folder = directory / f"parts-{key}"
        self.shapes = shapes
        with output_errors(self.folder):
            self.folder.mkdir(exist_ok=True)
            for aside in self.folder.glob("*.aside"):
                aside.unlink()
        self._files: dict[int, Path] = {}
        for path in sorted(self.folder.iterdir()):
            match = NAME.fullmatch(path.name)
            if match and int(match[1]) < len(shapes) and self._whole(path, match[2], shapes[int(match[1])]):
                self._files[int(match[1])] = path
            elif match:
                path.unlink()

    def __contains__(self, number: int) -> bool:
        return number in self._files

    def write(self, number: int, codes: np.ndarray) -> None:
        """Put one part on disk."""
        if codes.dtype != CODE_TYPE or codes.shape != self.shapes[number]:
            raise StoreError(f"part {number}: {codes.dtype} {codes.shape} instead of uint16 {self.shapes[number]}")
        content = npy_bytes(codes)
        path = self.folder / f"{number:05d}-{hashlib.sha256(content).hexdigest()[:32]}.npy"
        write_atomically(path, content)
        self._files[number] = path

    def read(self, number: int) -> np.ndarray:
        """Codes of a part, memory-mapped."""
        return np.load(self._files[number], mmap_mode="r", allow_pickle=False)

    def remove(self) -> None:
        """Delete all parts, after the grid has been written."""
        shutil.rmtree(self.folder)

    @staticmethod
    def _whole(path: Path, digest: str, shape: tuple[int, ...]) -> bool:
        content = path.read_bytes()
        if hashlib.sha256(content).hexdigest()[:32] != digest:
            return False
        codes = np.load(path, mmap_mode="r", allow_pickle=False)
        return codes.dtype == CODE_TYPE and codes.shape == shape


def part_folders(directory: Path) -> list[str]:
    """Keys of the builds that have parts in a grid directory."""
    return sorted(match[1] for path in directory.iterdir() if (match := FOLDER.fullmatch(path.name)))


def remove_finished(directory: Path, keys: list[str]) -> None:
    """Delete what a build killed after writing its header has left."""
    for key in part_folders(directory):
        if key in keys:
            shutil.rmtree(directory / f"parts-{key}")
