"""Every error that specsolve raises on purpose.

All of them derive from `SpecsolveError`, carry the numbers they speak of as attributes, and name the exit
code with which the command line ends when nothing handles them.  A message says what was wrong, the value,
the allowed range and the next step, on one line.

Bad science is not an error: a star that does not converge is a result with a status and flags.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

EXIT_SOLVED = 0
EXIT_UNEXPECTED = 1
EXIT_USAGE = 2
EXIT_NO_INPUT = 3
EXIT_UNSOLVED = 4
EXIT_INTERRUPTED = 130


class SpecsolveError(Exception):
    """Base of all errors of this package.

    Attributes
    ----------
    exit_code : int
        What the command line exits with.
    """

    exit_code: int = EXIT_UNEXPECTED


class UsageError(SpecsolveError):
    """An option or an argument makes no sense."""

    exit_code = EXIT_USAGE


class InputError(SpecsolveError):
    """A table or file given by the user cannot be used.

    Parameters
    ----------
    message : str
        One line for the user.
    path : path-like, optional
        The file.
    row : int, optional
        Zero-based row of the table.
    """

    exit_code = EXIT_NO_INPUT

    def __init__(self, message: str, *, path: str | Path | None = None, row: int | None = None) -> None:
        super().__init__(message)
        self.path = path
        self.row = row


class ColumnError(InputError):
    """A column is missing, doubled or holds what it should not.

    Attributes
    ----------
    column : str
        The column asked for.
    found : tuple of str
        The columns that the table has.
    """

    def __init__(
        self,
        message: str,
        *,
        column: str | None = None,
        found: Sequence[str] = (),
        path: str | Path | None = None,
        row: int | None = None,
    ) -> None:
        super().__init__(message, path=path, row=row)
        self.column = column
        self.found = tuple(found)


class UnitError(InputError):
    """A column has no unit, or one that cannot be converted.

    Attributes
    ----------
    column : str
    unit : str or None
        What the table says; `None` if it says nothing.
    expected : str
        A unit that would do.
    """

    def __init__(
        self,
        message: str,
        *,
        column: str | None = None,
        unit: str | None = None,
        expected: str | None = None,
        path: str | Path | None = None,
    ) -> None:
        super().__init__(message, path=path)
        self.column = column
        self.unit = unit
        self.expected = expected


class LineError(InputError):
    """A spectral line cannot be used: unknown ion, wavelength out of range, contradicting repeats.

    Attributes
    ----------
    wavelength_air : float or None
        [Angstrom]
    ion : str or None
    """

    def __init__(
        self,
        message: str,
        *,
        wavelength_air: float | None = None,
        ion: str | None = None,
        path: str | Path | None = None,
        row: int | None = None,
    ) -> None:
        super().__init__(message, path=path, row=row)
        self.wavelength_air = wavelength_air
        self.ion = ion


class OutOfGridError(SpecsolveError):
    """A parameter lies outside the axes of a grid.

    Attributes
    ----------
    axis : str
    value, low, high : float
        In the unit of the axis.
    """

    exit_code = EXIT_UNSOLVED

    def __init__(self, axis: str, value: float, low: float, high: float, message: str | None = None) -> None:
        super().__init__(
            message
            or f"{axis} = {value:g} lies outside the grid ({low:g} to {high:g}). Fix {axis}, or build a wider grid."
        )
        self.axis = axis
        self.value = value
        self.low = low
        self.high = high

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.axis, self.value, self.low, self.high, str(self))


class MissingNodeError(SpecsolveError):
    """A node of a store is missing, for a stated reason.

    Attributes
    ----------
    reason : str
    node : dict
        Axis name to value.
    """

    exit_code = EXIT_UNSOLVED

    def __init__(self, reason: str, node: dict[str, float] | None = None) -> None:
        where = ", ".join(f"{name} {value:g}" for name, value in (node or {}).items())
        super().__init__(f"no model at {where}: {reason}" if where else reason)
        self.reason = reason
        self.node = dict(node or {})

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.reason, self.node)


class StoreError(SpecsolveError):
    """A store (atmospheres, response grid) cannot be used: other schema, wrong checksum, damaged, foreign.

    Attributes
    ----------
    path : path-like or None
    schema : int or None
        The schema number that the store states.
    """

    exit_code = EXIT_NO_INPUT

    def __init__(self, message: str, *, path: str | Path | None = None, schema: int | None = None) -> None:
        super().__init__(message)
        self.path = path
        self.schema = schema


class LockError(StoreError):
    """Another living process writes to the same store.

    Attributes
    ----------
    pid : int or None
    """

    def __init__(self, message: str, *, path: str | Path | None = None, pid: int | None = None) -> None:
        super().__init__(message, path=path)
        self.pid = pid


class OutputError(SpecsolveError):
    """A result cannot be written: no permission, no such folder, disk full.

    Attributes
    ----------
    path : path-like or None
    """

    exit_code = EXIT_UNEXPECTED

    def __init__(self, message: str, *, path: str | Path | None = None) -> None:
        super().__init__(message)
        self.path = path


class ConvergenceError(SpecsolveError):
    """An iteration ended without reaching its tolerance.

    Attributes
    ----------
    error, tolerance : float
        In the unit the message names.
    iterations : int
    """

    exit_code = EXIT_UNSOLVED

    def __init__(
        self,
        message: str,
        *,
        error: float = float("nan"),
        tolerance: float = float("nan"),
        iterations: int = 0,
    ) -> None:
        super().__init__(message)
        self.error = error
        self.tolerance = tolerance
        self.iterations = iterations


class NotEnoughLinesError(SpecsolveError):
    """Too few usable lines for what was asked.

    Attributes
    ----------
    counts : dict
        Ion to number of usable lines.
    """

    exit_code = EXIT_UNSOLVED

    def __init__(self, message: str, *, counts: dict[str, int] | None = None) -> None:
        super().__init__(message)
        self.counts = dict(counts or {})


class SpectrumError(InputError):
    """A spectrum cannot be used: not readable, wrong unit, no light, no peak in the velocity search.

    Attributes
    ----------
    path : path-like or None
    value : float or None
        The number the message speaks of.
    """

    def __init__(self, message: str, *, path: str | Path | None = None, value: float | None = None) -> None:
        super().__init__(message, path=path)
        self.value = value
