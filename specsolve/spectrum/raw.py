"""What a file holds before any decision, and what the user says beyond it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

AIR, VACUUM = "air", "vacuum"
LOG_UNIT = "log10(Angstrom)"


@dataclass(frozen=True, kw_only=True)
class ReadOptions:
    """What the user says about a spectrum; `None` where the file decides.

    Attributes
    ----------
    star : str or None
        Name; the file's stem by default.
    medium : str or None
        "air" or "vacuum".
    unit : str or None
        Of the wavelengths: any unit of length, or "log10(Angstrom)".
    resolving_power : float or None
    signal_to_noise : float or None
        Per pixel in the continuum; replaces errors of the file.
    normalised : bool or None
    columns : mapping
        Our column (wavelength, flux, sigma, mask, order) to theirs.
    """

    star: str | None = None
    medium: str | None = None
    unit: str | None = None
    resolving_power: float | None = None
    signal_to_noise: float | None = None
    normalised: bool | None = None
    columns: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True, kw_only=True, eq=False)
class RawPiece:
    """Columns of one order as the file has them; `sigma` and `mask` may be missing."""

    wavelength: np.ndarray
    flux: np.ndarray
    sigma: np.ndarray | None = None
    mask: np.ndarray | None = None


@dataclass(frozen=True, kw_only=True, eq=False)
class Raw:
    """A file before any decision.

    Attributes
    ----------
    pieces : list of RawPiece
    unit : str or None
        Unit that the file states for the wavelengths.
    medium : str or None
        "air" or "vacuum", where the file tells.
    unit_assumed : bool
        `unit` is a default of the reader, not the file's word.
    header : mapping
        Keywords, plain values.
    notes : tuple of str
    """

    pieces: list[RawPiece]
    unit: str | None
    medium: str | None
    unit_assumed: bool = False
    header: Mapping[str, Any] = field(default_factory=dict)
    notes: tuple[str, ...] = ()


SPELLINGS = {
    "angstroms": "Angstrom",
    "angstrom": "Angstrom",
    "ang": "Angstrom",
    "a": "Angstrom",
    "nanometer": "nm",
    "nanometers": "nm",
    "microns": "micron",
    "um": "micron",
}
"""Units as headers spell them, in lower case (common practice, no source); an ampere is no wavelength."""


def unit_name(text: str) -> str:
    """A unit of wavelength as astropy spells it.

    Examples
    --------
    >>> unit_name("ANGSTROMS"), unit_name("nm")
    ('Angstrom', 'nm')
    """
    return SPELLINGS.get(text.strip().lower(), text.strip())
