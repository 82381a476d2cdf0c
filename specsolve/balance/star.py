"""`Star`: the measured lines of one star as numeric arrays, and their match with the lines of a grid."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from typing import Any

import numpy as np

WAVELENGTH_TOLERANCE = 0.05  # Angstrom; the same as for the identification of lines
ENERGY_TOLERANCE = 0.02  # eV
HUGE_WIDTH_MA = 1000.0  # no iron line of the grid's stars comes near (common practice, no source)

# Error assumed where the input gives none: a floor and a fraction of the width in quadrature (common practice,
# no source).
# It is a lower limit on purpose: what it lacks is found from the star's own lines as their line-to-line term.
ASSUMED_ERROR_FLOOR_MA = 0.5
ASSUMED_ERROR_FRACTION = 0.01

KEPT_MATCHES = 256  # lists of lines whose match with the grid's is remembered

REASON_BAD_WIDTH = "bad_width"
REASON_HUGE_WIDTH = "huge_width"
REASON_NOT_USED = "marked_unused"
REASON_NOT_IN_GRID = "not_in_grid"
REASON_REPEATED = "repeated"


@dataclass(frozen=True, kw_only=True, eq=False)
class Star:
    """Measured lines of one star, each array of shape (n_lines,), in canonical order.

    Build with `Star.from_arrays`, which sorts: results do not depend on the order of the input.

    Attributes
    ----------
    name : str
    wavelength_air : ndarray
        [Angstrom].
    ion : ndarray of str
        "Fe I", "Fe II".
    excitation_potential, log_gf, log_gf_error : ndarray
        [eV], [dex], [dex]; nan = not given, the grid's value counts.
    equivalent_width, equivalent_width_error : ndarray
        [mA]; an error that was not given is assumed and marked in `error_assumed`.
    error_assumed, use : ndarray of bool
    notes : tuple of str
        What was decided on reading.
    known : mapping
        What the input says of the star beside its lines, see `specsolve.balance.outside_known`.
    """

    name: str
    wavelength_air: np.ndarray
    ion: np.ndarray
    excitation_potential: np.ndarray
    log_gf: np.ndarray
    log_gf_error: np.ndarray
    equivalent_width: np.ndarray
    equivalent_width_error: np.ndarray
    error_assumed: np.ndarray
    use: np.ndarray
    notes: tuple[str, ...] = ()
    known: Mapping[str, Any] = field(default_factory=dict)

    @classmethod
    def from_arrays(
        cls,
        name: str,
        wavelength_air,
        ion,
        equivalent_width,
        equivalent_width_error=None,
        *,
        excitation_potential=None,
        log_gf=None,
        log_gf_error=None,
        use=None,
        notes: tuple[str, ...] = (),
        known: Mapping[str, Any] | None = None,
    ) -> Star:
        """Build a star from arrays of numbers; units as in the class.

        Examples
        --------
        >>> star = Star.from_arrays("A", [6301.5, 5000.0], ["Fe I", "Fe I"], [80.0, 20.0])
        >>> star.wavelength_air
        array([5000. , 6301.5])
        """
        wavelength = np.asarray(wavelength_air, float)
        n_lines = wavelength.size

        def column(values):
            return np.full(n_lines, np.nan) if values is None else np.asarray(values, float)

        width = np.asarray(equivalent_width, float)
        error = column(equivalent_width_error)
        assumed = ~(np.isfinite(error) & (error > 0.0))
        usable = np.where(np.isfinite(width) & (width > 0.0), width, 0.0)
        error = np.where(assumed, np.hypot(ASSUMED_ERROR_FLOOR_MA, ASSUMED_ERROR_FRACTION * usable), error)
        columns = {
            "wavelength_air": wavelength,
            "ion": np.asarray(ion, str),
            "excitation_potential": column(excitation_potential),
            "log_gf": column(log_gf),
            "log_gf_error": column(log_gf_error),
            "equivalent_width": width,
            "equivalent_width_error": error,
            "error_assumed": assumed,
            "use": np.ones(n_lines, bool) if use is None else np.asarray(use, bool),
        }
        order = np.lexsort((error, width, columns["excitation_potential"], wavelength, columns["ion"]))
        return cls(
            name=str(name),
            notes=notes,
            known=dict(known or {}),
            **{key: values[order] for key, values in columns.items()},
        )

    def __len__(self) -> int:
        return self.wavelength_air.size

    @property
    def identity(self) -> str:
        """SHA-256 of the measured numbers (hex); the name does not enter."""
        digest = hashlib.sha256()
        if self.known:
            digest.update(json.dumps(self.known, sort_keys=True, default=lambda array: array.tolist()).encode())
        for item in fields(self):
            if item.name in ("name", "notes", "known"):
                continue
            values = getattr(self, item.name)
            text = "\n".join(values.tolist()).encode() if values.dtype.kind == "U" else b""
            digest.update(item.name.encode() + text + (b"" if text else np.ascontiguousarray(values).tobytes()))
        return digest.hexdigest()


@dataclass(frozen=True, kw_only=True, eq=False)
class Match:
    """Where a star's lines stand in a list.

    Attributes
    ----------
    index : ndarray of int, shape (n_lines,)
        Index in the list, -1 where the list has no such line.
    reason : ndarray of str, shape (n_lines,)
        Why a line of the star cannot be used; empty if it can.
    looks_like_vacuum : bool
        Few lines match, but most would if the wavelengths were taken as vacuum ones.
    """

    index: np.ndarray
    reason: np.ndarray
    looks_like_vacuum: bool

    @property
    def n_matched(self) -> int:
        """Lines of the star that the list has, whether usable or not."""
        return int(np.count_nonzero(self.index >= 0))


def nearest_lines(wavelength_air, ion, excitation_potential, list_wavelength, list_ion, list_energy) -> np.ndarray:
    """Index of the nearest line of the same ion within 0.05 Angstrom (and 0.02 eV where an energy is given), else
    -1.
    """
    index = np.full(len(wavelength_air), -1, dtype=np.int64)
    for name in np.unique(ion):
        of_list = np.flatnonzero(list_ion == name)
        of_star = np.flatnonzero(ion == name)
        if of_list.size == 0:
            continue
        distance = np.abs(wavelength_air[of_star, None] - list_wavelength[None, of_list])
        energy = np.abs(excitation_potential[of_star, None] - list_energy[None, of_list])
        fits = (distance <= WAVELENGTH_TOLERANCE) & ~(energy > ENERGY_TOLERANCE)  # nan energy: any
        distance = np.where(fits, distance, np.inf)
        best = np.argmin(distance, axis=1)
        found = np.isfinite(distance[np.arange(of_star.size), best])
        index[of_star[found]] = of_list[best[found]]
    return index


def match_lines(star: Star, lines) -> Match:
    """Match a star's lines with a `LineList`; unusable widths and repeats get their reason.

    Of repeated measurements of one line the one with the smallest relative error is kept.
    """
    index = _known_index(star, lines)
    looks_like_vacuum = False
    if len(star) >= 5 and np.count_nonzero(index >= 0) < 0.3 * len(star):
        looks_like_vacuum = _fits_as_vacuum(star, lines)
    width = star.equivalent_width
    reason = np.full(len(star), "", dtype="U32")
    reason[index < 0] = REASON_NOT_IN_GRID
    reason[width > HUGE_WIDTH_MA] = REASON_HUGE_WIDTH
    reason[~(np.isfinite(width) & (width > 0.0))] = REASON_BAD_WIDTH
    reason[~star.use] = REASON_NOT_USED
    rows = np.flatnonzero((index >= 0) & (reason == ""))
    relative = star.equivalent_width_error[rows] / width[rows]
    best_first = rows[np.lexsort((rows, relative, index[rows]))]
    repeated = np.r_[False, np.diff(index[best_first]) == 0][: rows.size]
    reason[best_first[repeated]] = REASON_REPEATED
    return Match(index=index, reason=reason, looks_like_vacuum=looks_like_vacuum)


_INDICES: dict[tuple, np.ndarray] = {}


def _known_index(star: Star, lines) -> np.ndarray:
    """`nearest_lines` of a star, remembered: stars of one survey mostly have the same lines."""
    columns = (star.wavelength_air, star.ion, star.excitation_potential)
    key = (lines.identity, *(np.ascontiguousarray(values).tobytes() for values in columns))
    if key not in _INDICES:
        if len(_INDICES) >= KEPT_MATCHES:
            _INDICES.clear()
        _INDICES[key] = nearest_lines(*columns, lines.wavelength_air, lines.ion, lines.excitation_potential)
        _INDICES[key].setflags(write=False)
    return _INDICES[key]


def _fits_as_vacuum(star: Star, lines) -> bool:
    from specsolve.lines.wavelengths import LIMITS_ANGSTROM, vacuum_to_air

    inside = (star.wavelength_air > LIMITS_ANGSTROM[0]) & (star.wavelength_air < LIMITS_ANGSTROM[1])
    if not inside.all():
        return False
    index = nearest_lines(
        vacuum_to_air(star.wavelength_air),
        star.ion,
        star.excitation_potential,
        lines.wavelength_air,
        lines.ion,
        lines.excitation_potential,
    )
    return bool(np.count_nonzero(index >= 0) > 0.5 * len(star))
