"""Where a result comes from: versions, inputs, command line, time."""

from __future__ import annotations

import hashlib
import platform
import subprocess
import sys
from collections.abc import Iterable, Mapping
from datetime import UTC, datetime
from importlib import metadata
from pathlib import Path
from typing import Any

DEPENDENCIES = ("numpy", "scipy", "astropy", "numba")
GIT_TIMEOUT_S = 2.0
BLOCK_BYTES = 1 << 20


def file_sha256(path: str | Path) -> str:
    """SHA-256 of a file, hexadecimal.

    Raises
    ------
    OSError
        If the file cannot be read.
    """
    digest = hashlib.sha256()
    with Path(path).open("rb") as stream:
        while block := stream.read(BLOCK_BYTES):
            digest.update(block)
    return digest.hexdigest()


def versions() -> dict[str, str]:
    """Versions of Python and of the libraries that the numbers depend on; nothing is imported for it."""
    found = {"python": platform.python_version()}
    for name in DEPENDENCIES:
        try:
            found[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            found[name] = "unknown"
    return found


def git_describe() -> str:
    """``git describe`` of the checkout that this package runs from; empty for an installed copy."""
    root = Path(__file__).resolve().parent.parent
    if not (root / ".git").exists():
        return ""
    try:
        done = subprocess.run(
            ["git", "-C", str(root), "describe", "--always", "--dirty", "--tags"],
            capture_output=True,
            text=True,
            timeout=GIT_TIMEOUT_S,
            check=False,
        )
    except (OSError, subprocess.TimeoutExpired):
        return ""
    return done.stdout.strip() if done.returncode == 0 else ""


def collect(
    *,
    inputs: Iterable[str | Path] = (),
    options: Mapping[str, Any] | None = None,
    command_line: Iterable[str] | None = None,
    seed: int | None = None,
    **further: Any,
) -> dict[str, Any]:
    """All that is needed to know how a result was made.

    Parameters
    ----------
    inputs : iterable of path-like
        Files read; their names and SHA-256 are kept.
    options : mapping, optional
        The full configuration, ready for JSON.
    command_line : iterable of str, optional
        ``sys.argv`` if not given.
    seed : int, optional
        Seed of the random numbers, where any were drawn.
    **further
        Kept as they are (identity of the grid, for example).

    Examples
    --------
    >>> collect(command_line=["specsolve", "solve", "widths.ecsv"])["command_line"]
    'specsolve solve widths.ecsv'
    """
    import shlex

    from specsolve import __version__

    arguments = list(sys.argv if command_line is None else command_line)
    if arguments and command_line is None:
        arguments[0] = Path(arguments[0]).name
    return {
        "specsolve": __version__,
        "git_describe": git_describe(),
        "versions": versions(),
        "utc": datetime.now(UTC).isoformat(timespec="seconds"),
        "command_line": shlex.join(arguments),
        "inputs": {Path(path).name: file_sha256(path) for path in inputs if str(path) != "-" and Path(path).is_file()},
        "options": dict(options or {}),
        "seed": seed,
        **further,
    }
