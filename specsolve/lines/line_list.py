"""`LineList`: one array per property, one entry per spectral line."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from dataclasses import dataclass, fields, replace
from functools import cached_property

import numpy as np

FLAG_UNIDENTIFIED = 1
FLAG_NO_HYDROGEN_DATA = 2
FLAG_AMBIGUOUS = 4
FLAG_CONFLICTING_LOG_GF = 8

FLAG_WORDS = {
    FLAG_UNIDENTIFIED: "not found in the table of Fe I and Fe II transitions: damping is estimated",
    FLAG_NO_HYDROGEN_DATA: "no hydrogen cross-section: Unsoeld's estimate, scaled",
    FLAG_AMBIGUOUS: "two transitions of similar strength match: the stronger is taken",
    FLAG_CONFLICTING_LOG_GF: "repeated with different log gf: the first value is kept",
}

HC_EV_ANGSTROM = 12398.419843320026
"""Planck constant times the speed of light [eV Angstrom], exact in the 2019 SI."""


def describe_flags(flags: int) -> str:
    """Words of a line's flags, joined by semicolons; empty if none is set.

    Examples
    --------
    >>> describe_flags(2)
    "no hydrogen cross-section: Unsoeld's estimate, scaled"
    """
    return "; ".join(word for bit, word in FLAG_WORDS.items() if int(flags) & bit)


@dataclass(frozen=True, kw_only=True, eq=False)
class LineList:
    """Spectral lines as a struct of arrays, each of shape (n_lines,).

    Attributes
    ----------
    wavelength_air : ndarray
        [Angstrom], standard air.
    ion : ndarray of str
        For example ``"Fe I"``.
    excitation_potential : ndarray
        Energy of the lower level [eV].
    log_gf, log_gf_error : ndarray
        log10 of the oscillator strength times the lower statistical weight, and its 1-sigma error [dex];
        the error is nan where nobody gave one.
    log_gf_alternative : ndarray
        A second published scale, nan where there is none.
    broadening_sigma, broadening_alpha : ndarray
        Hydrogen broadening cross-section at 10 km/s [a0^2] and its velocity exponent; nan if unknown.
    log_gamma_rad : ndarray
        log10 of the radiative damping width, full width at half maximum [rad/s]; nan if unknown.
    log_gamma_stark : ndarray
        log10 of the electron broadening full width per electron at 10 000 K [rad cm3/s]; nan if unknown.
    lower_term, upper_term : ndarray of str
        Empty if unidentified.
    grade : ndarray of int
        1 (best) to 4; 0 is ungraded.
    flags : ndarray of uint16
        Bits, see `describe_flags`.
    note, source : ndarray of str
    transition : ndarray of str
        Name of the identified transition, or a name made of the line's own numbers; never contains log gf.
    remarks : tuple of str
        What reading and merging had to say.

    Examples
    --------
    >>> lines = LineList.from_arrays([6301.5], ["Fe I"], [3.654], [-0.718])
    >>> len(lines), lines.key[0]
    (1, 'Fe I 6301.500 3.654')
    """

    wavelength_air: np.ndarray
    ion: np.ndarray
    excitation_potential: np.ndarray
    log_gf: np.ndarray
    log_gf_error: np.ndarray
    log_gf_alternative: np.ndarray
    broadening_sigma: np.ndarray
    broadening_alpha: np.ndarray
    log_gamma_rad: np.ndarray
    log_gamma_stark: np.ndarray
    lower_term: np.ndarray
    upper_term: np.ndarray
    grade: np.ndarray
    flags: np.ndarray
    note: np.ndarray
    source: np.ndarray
    transition: np.ndarray
    remarks: tuple[str, ...] = ()

    @classmethod
    def from_arrays(cls, wavelength_air, ion, excitation_potential, log_gf, *, remarks=(), **optional) -> LineList:
        """Build a list from arrays; any property of the class may be given by name, the rest is unknown.

        The order of the lines is kept; `sorted` gives the canonical order.
        """
        wavelength = np.atleast_1d(np.asarray(wavelength_air, float))
        n_lines = wavelength.size
        unknown = set(optional) - {f.name for f in fields(cls)}
        if unknown:
            raise TypeError(f"unknown line properties: {', '.join(sorted(unknown))}")

        def column(values, dtype):
            array = np.asarray(values, dtype)
            array = np.full(n_lines, array) if array.ndim == 0 else array
            if array.shape != (n_lines,):
                raise ValueError(f"{array.shape} values for {n_lines} lines")
            return array

        given = {
            "wavelength_air": wavelength,
            "ion": column(ion, str),
            "excitation_potential": column(excitation_potential, float),
            "log_gf": column(log_gf, float),
        }
        for field in fields(cls):
            if field.name in given or field.name == "remarks":
                continue
            if field.name in TEXT:
                given[field.name] = column(optional.get(field.name, ""), str)
            elif field.name in INTEGER:
                given[field.name] = column(optional.get(field.name, 0), INTEGER[field.name])
            else:
                given[field.name] = column(optional.get(field.name, np.nan), float)
        own = np.array(
            [
                transition_name(*line)
                for line in zip(given["ion"], wavelength, given["excitation_potential"], strict=True)
            ],
            dtype=str,
        )
        given["transition"] = np.where(given["transition"] == "", own, given["transition"])
        return cls(**given, remarks=tuple(remarks))

    def __len__(self) -> int:
        return self.wavelength_air.size

    @property
    def key(self) -> np.ndarray:
        """Name of each line in stores, array of str; log gf does not enter."""
        return self.transition

    @property
    def upper_energy(self) -> np.ndarray:
        """Energy of the upper level [eV]."""
        from .wavelengths import air_to_vacuum

        return self.excitation_potential + HC_EV_ANGSTROM / air_to_vacuum(self.wavelength_air)

    @cached_property
    def identity(self) -> str:
        """SHA-256 of all that enters a calculation (hex); notes and sources do not."""
        digest = hashlib.sha256()
        for name in COMPUTED:
            values = getattr(self, name)
            digest.update(name.encode())
            if name in TEXT:
                digest.update("\n".join(values.tolist()).encode())
            else:
                digest.update(np.ascontiguousarray(values, "<f8").tobytes())
        return digest.hexdigest()

    def canonical_order(self) -> np.ndarray:
        """Indices that sort by ion, wavelength, excitation potential and name."""
        return np.lexsort((self.transition, self.excitation_potential, self.wavelength_air, self.ion))

    def select(self, index) -> LineList:
        """The lines of an index array, slice or mask, in that order."""
        return LineList(
            **{f.name: getattr(self, f.name)[index] for f in fields(self) if f.name != "remarks"}, remarks=self.remarks
        )

    def sorted(self) -> LineList:
        """The list in canonical order."""
        return self.select(self.canonical_order())

    def with_columns(self, **columns) -> LineList:
        """A copy with some properties replaced."""
        return replace(self, **columns)

    def joined(self, other: LineList) -> LineList:
        """This list followed by another."""
        return LineList(
            **{
                f.name: np.concatenate([getattr(self, f.name), getattr(other, f.name)])
                for f in fields(self)
                if f.name != "remarks"
            },
            remarks=self.remarks + other.remarks,
        )

    def position_of(self, keys) -> np.ndarray:
        """Index of each key in this list, -1 where it is absent."""
        where = {key: i for i, key in enumerate(self.key.tolist())}
        return np.array([where.get(str(key), -1) for key in np.atleast_1d(keys)], dtype=np.int64)

    def to_columns(self) -> dict[str, list]:
        """Plain lists by name for a JSON header; nan becomes None."""
        columns: dict[str, list] = {}
        for field in fields(self):
            if field.name == "remarks":
                continue
            values = getattr(self, field.name)
            if values.dtype.kind == "f":
                columns[field.name] = [None if np.isnan(v) else float(v) for v in values]
            else:
                columns[field.name] = values.tolist()
        return columns

    @classmethod
    def from_columns(cls, columns: dict[str, list]) -> LineList:
        """Inverse of `to_columns`; names that this version does not know are ignored."""
        known = {f.name for f in fields(cls)} - {"remarks"}
        plain = {
            name: values if name in TEXT or name in INTEGER else [np.nan if v is None else v for v in values]
            for name, values in columns.items()
            if name in known
        }
        required = [plain.pop(name) for name in ("wavelength_air", "ion", "excitation_potential", "log_gf")]
        return cls.from_arrays(*required, **plain)

    def to_table(self):
        """`astropy.table.QTable` with units, for writing."""
        from .reading import table_from_line_list

        return table_from_line_list(self)

    def rows(self) -> Iterator[tuple[str, float, float, float]]:
        """(ion, wavelength_air, excitation_potential, log_gf) of each line."""
        yield from zip(
            self.ion.tolist(),
            self.wavelength_air.tolist(),
            self.excitation_potential.tolist(),
            self.log_gf.tolist(),
            strict=True,
        )


TEXT = frozenset({"ion", "lower_term", "upper_term", "note", "source", "transition"})
INTEGER = {"grade": np.int64, "flags": np.uint16}
COMPUTED = (
    "wavelength_air",
    "ion",
    "excitation_potential",
    "log_gf",
    "broadening_sigma",
    "broadening_alpha",
    "log_gamma_rad",
    "log_gamma_stark",
    "transition",
)


def transition_name(ion: str, wavelength_air: float, excitation_potential: float) -> str:
    """Name of a transition: ion, air wavelength to 0.001 Angstrom, lower energy to 0.001 eV.

    Examples
    --------
    >>> transition_name("Fe II", 5414.073, 3.2215)
    'Fe II 5414.073 3.221'
    """
    return f"{ion} {wavelength_air:.3f} {excitation_potential:.3f}"
