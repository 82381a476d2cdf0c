"""Lines of any element for synthesis: our own iron lines joined with the neighbours of the packaged blanketing table."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np

from specsolve.lines import LineList, air_to_vacuum, vacuum_to_air
from specsolve.lines.line_list import HC_EV_ANGSTROM

SAME_WAVELENGTH = 0.05
"""Two lines of one ion are the same if closer than this [Angstrom] ..."""
SAME_ENERGY = 0.02  # ... and their lower levels than this [eV]; as in `lines.identify`


@dataclass(frozen=True, kw_only=True, eq=False)
class SpectralLines:
    """Lines in order of wavelength; arrays of shape (n_lines,).

    Attributes
    ----------
    ion : ndarray of str
        For example ``"Ti II"``.
    wavelength_air : ndarray
        [Angstrom].
    excitation_potential : ndarray
        [eV].
    log_gf : ndarray
    broadening_sigma, broadening_alpha, log_gamma_rad, log_gamma_stark : ndarray
        As in `LineList`; nan if unknown.
    own : ndarray of int
        Place in the line list that the line came from; -1 for a neighbour.

    Examples
    --------
    >>> len(SpectralLines.of(LineList.from_arrays([6301.5], ["Fe I"], [3.654], [-0.718])))
    1
    """

    ion: np.ndarray
    wavelength_air: np.ndarray
    excitation_potential: np.ndarray
    log_gf: np.ndarray
    broadening_sigma: np.ndarray
    broadening_alpha: np.ndarray
    log_gamma_rad: np.ndarray
    log_gamma_stark: np.ndarray
    own: np.ndarray

    def __len__(self) -> int:
        return self.wavelength_air.size

    @property
    def wavelength_vacuum(self) -> np.ndarray:
        """[Angstrom]"""
        return air_to_vacuum(self.wavelength_air)

    @property
    def upper_energy(self) -> np.ndarray:
        """Energy of the upper level [eV]."""
        return self.excitation_potential + HC_EV_ANGSTROM / self.wavelength_vacuum

    @classmethod
    def of(cls, lines: LineList) -> SpectralLines:
        """The lines of a list, sorted by wavelength."""
        order = np.argsort(lines.wavelength_air, kind="stable")
        columns = {f.name: getattr(lines, f.name)[order] for f in fields(cls) if f.name != "own"}
        return cls(**columns, own=order)

    @classmethod
    def of_blanketing(cls, table, low: float, high: float) -> SpectralLines:
        """The lines of a `BlanketingLines` between two air wavelengths [Angstrom]."""
        vacuum = table.wavelength_cm * 1e8
        at = np.flatnonzero((vacuum > air_to_vacuum(low)) & (vacuum < air_to_vacuum(high)))
        unknown = np.full(at.size, np.nan)
        return cls(
            ion=np.array(table.ions)[table.ion_index[at]],
            wavelength_air=vacuum_to_air(vacuum[at]),
            excitation_potential=table.excitation_potential[at],
            log_gf=table.log_gf[at],
            broadening_sigma=unknown,
            broadening_alpha=unknown,
            log_gamma_rad=table.log_gamma_rad[at],
            log_gamma_stark=unknown,
            own=np.full(at.size, -1),
        )

    def select(self, index) -> SpectralLines:
        """The lines of a mask or of increasing indices."""
        return SpectralLines(**{f.name: getattr(self, f.name)[index] for f in fields(self)})

    def with_columns(self, **columns) -> SpectralLines:
        """A copy with some properties replaced."""
        return SpectralLines(**{f.name: columns.get(f.name, getattr(self, f.name)) for f in fields(self)})

    def without(self, others: SpectralLines) -> SpectralLines:
        """The lines that are not among the others: same ion, wavelength within 0.05 Angstrom, energy within 0.02 eV.

        Of several that fit one of the others only the strongest is that line.
        """
        keep = np.ones(len(self), bool)
        low = np.searchsorted(self.wavelength_air, others.wavelength_air - SAME_WAVELENGTH)
        high = np.searchsorted(self.wavelength_air, others.wavelength_air + SAME_WAVELENGTH)
        for i, (a, b) in enumerate(zip(low, high, strict=True)):
            near = np.arange(a, b)
            near = near[(self.ion[near] == others.ion[i])]
            near = near[np.abs(self.excitation_potential[near] - others.excitation_potential[i]) < SAME_ENERGY]
            if near.size:
                keep[near[np.argmax(self.log_gf[near])]] = False
        return self.select(keep)

    def joined(self, others: SpectralLines) -> SpectralLines:
        """Both, sorted by wavelength."""
        columns = {f.name: np.concatenate([getattr(self, f.name), getattr(others, f.name)]) for f in fields(self)}
        order = np.argsort(columns["wavelength_air"], kind="stable")
        return SpectralLines(**{name: values[order] for name, values in columns.items()})
