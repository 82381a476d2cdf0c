"""Spectra of three members of the invented demo cluster, computed with our own line formation.

Nothing here is real: stars, spectrograph, observatory, sky position and velocities are invented (see `specsolve.demo`).
The atmospheres are those of the demo's widths; log gf of the iron lines carry the same errors, those of the neighbours
errors of their own, so that measuring the spectra meets lines that are not as predicted.

``python -m specsolve.demo_spectra --output demo_data/spectra`` writes one FITS file a star (about five minutes, of
which most is the opacity table).
"""

from __future__ import annotations

import argparse
import logging
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from specsolve.constants import SOLAR_IRON
from specsolve.demo import (
    CLUSTER,
    CLUSTER_FEH,
    INVENTED,
    MEMBERS,
    SEED,
    TARN,
    UNKNOWN_LOG_GF_ERROR,
    Member,
    atmospheres,
)
from specsolve.formation.spectral_lines import SpectralLines
from specsolve.formation.synthesis import make_medium, opacities_of, relative_flux
from specsolve.lines import LineList, default_line_list
from specsolve.matter.composition import composition_for
from specsolve.spectrum.observe import observe, velocity_grid
from specsolve.spectrum.predict import packaged_neighbours
from specsolve.spectrum.types import Spectrum

log = logging.getLogger(__name__)

NEIGHBOUR_LOG_GF_ERROR = 0.15  # dex
MARGIN = 8.0  # Angstrom computed beyond the ends of the spectrograph
OBSERVATORY = {"OBS-LAT": 41.5, "OBS-LONG": -21.0, "OBS-ELEV": 1180.0}  # an island that does not exist
SKY = {"RA": 201.35, "DEC": 33.12}  # degrees; invented


@dataclass(frozen=True)
class Visit:
    """One invented observation: velocity, rotation and macroturbulence [km/s], counts in the continuum, date."""

    member: str
    velocity: float
    vsini: float
    macroturbulence: float
    counts: float
    date: str


VISITS = (
    Visit(f"{CLUSTER} 112", -23.41, 3.2, 3.1, 11500.0, "2019-04-17T23:41:09"),
    Visit(f"{CLUSTER} 206", -22.87, 4.6, 3.9, 23000.0, "2019-04-18T00:52:40"),
    Visit(f"{CLUSTER} 302", -23.92, 2.1, 4.8, 36000.0, "2019-04-18T02:05:31"),
)


def true_lines(seed: int = SEED) -> tuple[LineList, SpectralLines]:
    """The iron lines as they are in nature (those of the demo's widths) and all lines of the spectra."""
    rng = np.random.default_rng(seed)
    lines = default_line_list()
    gf_error = np.where(np.isnan(lines.log_gf_error), UNKNOWN_LOG_GF_ERROR, lines.log_gf_error)
    nature = lines.with_columns(log_gf=lines.log_gf + rng.normal(0.0, gf_error))
    own = SpectralLines.of(nature)
    others = packaged_neighbours().without(own)
    others = others.with_columns(log_gf=others.log_gf + rng.normal(0.0, NEIGHBOUR_LOG_GF_ERROR, len(others)))
    return nature, own.joined(others)


def compute(member: Member, visit: Visit, model, everything: SpectralLines, rng: np.random.Generator) -> Spectrum:
    """The spectrum that the invented spectrograph takes of a member."""
    low, high = TARN.wavelength_range[0] - MARGIN, TARN.wavelength_range[1] + MARGIN
    near = (everything.wavelength_air > low - 5.0) & (everything.wavelength_air < high + 5.0)
    medium = make_medium(model, composition_for(CLUSTER_FEH), SOLAR_IRON + CLUSTER_FEH, low, high)
    grid = velocity_grid(low, high)
    flux = relative_flux(medium, opacities_of(medium, everything.select(near), member.vmic), grid)
    middle, half = 0.5 * (low + high), 0.5 * (high - low)

    def continuum(wavelength: np.ndarray) -> np.ndarray:
        x = (wavelength - middle) / half
        return visit.counts * (1.0 + 0.18 * x - 0.22 * x**2 + 0.03 * np.sin(9.0 * x))

    return observe(
        grid,
        flux,
        star=member.name,
        resolving_power=TARN.resolving_power,
        signal_to_noise=member.signal_to_noise,
        rng=rng,
        pixels_per_fwhm=TARN.pixels_per_fwhm,
        vsini=visit.vsini,
        macroturbulence=visit.macroturbulence,
        velocity=visit.velocity,
        continuum=continuum,
    )


def write(spectrum: Spectrum, visit: Visit, path: Path) -> Path:
    """One FITS file: flux in steps of ln(wavelength), errors in an extension, gap of the detectors as nan."""
    from astropy.io import fits

    wave = spectrum.wavelength_air
    gap = (wave > TARN.gap[0]) & (wave < TARN.gap[1])
    step = np.log(wave[-1] / wave[0]) / (wave.size - 1)
    primary = fits.PrimaryHDU(np.where(gap, np.nan, spectrum.flux).astype(">f4"))
    primary.header.update(
        {
            "OBJECT": spectrum.star,
            "INSTRUME": "Tarn (invented)",
            "CRPIX1": 1.0,
            "CRVAL1": float(wave[0]),
            "CDELT1": float(wave[0] * step),
            "CTYPE1": "AWAV-LOG",
            "CUNIT1": "Angstrom",
            "BUNIT": "count",
            "SPEC_RES": TARN.resolving_power,
            "SPECSYS": "TOPOCENT",
            "DATE-OBS": visit.date,
            "EXPTIME": 1800.0,
            **SKY,
            **OBSERVATORY,
        }
    )
    primary.header["COMMENT"] = INVENTED
    errors = fits.ImageHDU(np.where(gap, np.nan, spectrum.sigma).astype(">f4"), name="ERR")
    fits.HDUList([primary, errors]).writeto(path, overwrite=True)
    return path


def make(output: str | Path, *, seed: int = SEED, visits: tuple[Visit, ...] = VISITS) -> list[Path]:
    """Make the spectra and write them; the folder is made if need be."""
    folder = Path(output)
    folder.mkdir(parents=True, exist_ok=True)
    by_name = {member.name: member for member in MEMBERS}
    members = tuple(by_name[visit.member] for visit in visits)
    _, everything = true_lines(seed)
    noise = dict(
        zip((visit.member for visit in VISITS), np.random.default_rng([seed, 2]).spawn(len(VISITS)), strict=True)
    )
    paths = []
    for member, visit, model in zip(members, visits, atmospheres(members, CLUSTER_FEH), strict=True):
        spectrum = compute(member, visit, model, everything, noise[member.name])
        paths.append(write(spectrum, visit, folder / f"{member.name.replace(' ', '_')}.fits"))
        log.info("%s: written", member.name)
    return paths


def main(arguments: list[str] | None = None) -> None:
    """``python -m specsolve.demo_spectra --output FOLDER``."""
    parser = argparse.ArgumentParser(prog="python -m specsolve.demo_spectra", description=INVENTED)
    parser.add_argument("--output", default="demo_data/spectra", help="folder for the spectra")
    parser.add_argument("--seed", type=int, default=SEED)
    options = parser.parse_args(arguments)
    logging.basicConfig(stream=sys.stderr, level=logging.INFO, format="%(asctime)s %(message)s")
    for path in make(options.output, seed=options.seed):
        print(path, file=sys.stderr)


if __name__ == "__main__":
    main()
