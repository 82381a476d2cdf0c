"""The compact packaged table of the lines that blanket the spectrum.

Wavelengths are vacuum wavelengths. The table is made by `specsolve.atmosphere.blanketing_convert`, which names the
published sources and what they lack.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

#: Steps of the stored integers: wavelength [A], excitation potential [eV], log gf [dex], log gamma_rad [dex].
WAVELENGTH_STEP_A = 1e-3
ENERGY_STEP_EV = 1e-3
LOG_GF_STEP = 2e-3
LOG_GAMMA_STEP = 0.02
#: The smallest log10 radiative damping constant [s^-1] that can be stored.
LOG_GAMMA_LOWEST = 5.5
DATA_FOLDER = Path(__file__).resolve().parent.parent / "data" / "blanketing"
SOURCE = (
    "Atomic Line List v3.00b4 (van Hoof 2018, Galaxies 6, 63); NIST Atomic Spectra Database (public domain). "
    "Made by python -m specsolve.atmosphere.blanketing_convert"
)


@dataclass(frozen=True, kw_only=True)
class BlanketingLines:
    """Lines in order of wavelength.

    Attributes
    ----------
    ions : tuple of str
        Names such as "Fe I".
    ion_index : ndarray of int, shape (n_lines,)
        Place of each line's ion in `ions`.
    wavelength_cm : ndarray, shape (n_lines,)
        Vacuum wavelength [cm].
    excitation_potential : ndarray, shape (n_lines,)
        Energy of the lower level [eV].
    log_gf : ndarray, shape (n_lines,)
        log10 of statistical weight times absorption oscillator strength.
    log_gamma_rad : ndarray, shape (n_lines,)
        log10 of the radiative damping constant [s^-1], the sum of A out of both levels.
    """

    ions: tuple[str, ...]
    ion_index: np.ndarray
    wavelength_cm: np.ndarray
    excitation_potential: np.ndarray
    log_gf: np.ndarray
    log_gamma_rad: np.ndarray

    def __len__(self) -> int:
        return len(self.wavelength_cm)


def save_lines(lines: BlanketingLines, path: Path) -> None:
    """Write the table as scaled integers (steps in the module's constants), wavelengths as differences."""
    wavelength = np.rint(lines.wavelength_cm * 1e8 / WAVELENGTH_STEP_A).astype(np.int64)
    np.savez_compressed(
        path,
        ions=np.array(lines.ions),
        ion_index=lines.ion_index.astype(np.uint8),
        wavelength_first=wavelength[:1],
        wavelength_difference=np.diff(wavelength).astype(np.uint32),
        excitation_potential=np.rint(lines.excitation_potential / ENERGY_STEP_EV).astype(np.uint16),
        log_gf=np.rint(lines.log_gf / LOG_GF_STEP).astype(np.int16),
        log_gamma_rad=np.rint((lines.log_gamma_rad - LOG_GAMMA_LOWEST) / LOG_GAMMA_STEP).clip(0, 255).astype(np.uint8),
        source=np.array(SOURCE),
    )


def load_lines(path: Path = DATA_FOLDER / "lines.npz") -> BlanketingLines:
    """Read the packaged table, or another of the same kind."""
    with np.load(path, allow_pickle=False) as stored:
        steps = np.concatenate([stored["wavelength_first"], stored["wavelength_difference"].astype(np.int64)])
        return BlanketingLines(
            ions=tuple(str(ion) for ion in stored["ions"]),
            ion_index=stored["ion_index"].astype(np.int64),
            wavelength_cm=np.cumsum(steps) * (WAVELENGTH_STEP_A * 1e-8),
            excitation_potential=stored["excitation_potential"] * ENERGY_STEP_EV,
            log_gf=stored["log_gf"] * LOG_GF_STEP,
            log_gamma_rad=LOG_GAMMA_LOWEST + stored["log_gamma_rad"] * LOG_GAMMA_STEP,
        )
