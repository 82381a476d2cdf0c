"""Trials of the measurement on computed spectra whose truth the fit does not know.

Truth: atmospheres between the nodes of the packaged store (`tests.integration.off_node`), the default lines and all
neighbours of the packaged table, rotation, macroturbulence, an instrument, noise, and a continuum of its own. The fit
knows 85 % of the neighbours, with log gf off by 0.2 dex, log gf of the lines to measure off by 0.1 dex, and a guess of
the star that is off by `GUESS_ERRORS`.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from specsolve.constants import SOLAR_IRON
from specsolve.formation import reduced_widths
from specsolve.formation.spectral_lines import SpectralLines
from specsolve.formation.synthesis import make_medium, opacities_of, relative_flux
from specsolve.lines import default_line_list
from specsolve.matter.composition import composition_for
from specsolve.spectrum.measure import measure_lines
from specsolve.spectrum.observe import observe, velocity_grid
from specsolve.spectrum.options import MeasureOptions
from specsolve.spectrum.predict import Guess, packaged_neighbours
from specsolve.spectrum.types import Measurements, Spectrum
from tests.integration import off_node

RANGE = (4740.0, 6860.0)  # Angstrom
UNKNOWN_PART = 0.15
NEIGHBOUR_GF_ERROR = 0.2  # dex
OWN_GF_ERROR = 0.1  # dex
GUESS_ERRORS = {"teff": 120.0, "logg": 0.25, "mh": 0.12, "vmic": 0.15}


@dataclass(frozen=True)
class Star:
    """An unbroadened computed spectrum and the true widths of the default lines [mA]."""

    teff: float
    logg: float
    mh: float
    vmic: float
    wavelength: np.ndarray
    flux: np.ndarray
    widths: np.ndarray


@lru_cache(maxsize=1)
def lines():
    """The default lines, those that `RANGE` covers well."""
    every = default_line_list()
    return every.select((every.wavelength_air > RANGE[0] + 5.0) & (every.wavelength_air < RANGE[1] - 5.0))


@lru_cache(maxsize=1)
def everything() -> SpectralLines:
    """All lines of the truth."""
    own = SpectralLines.of(lines())
    return own.joined(packaged_neighbours().without(own))


def possible_stars() -> list[int]:
    """Off-node atmospheres on which widths are to be measured: 4500 to 6500 K, [Fe/H] above -2.2."""
    return [
        i
        for i, node in enumerate(off_node.load())
        if node.kind == off_node.RANDOM and node.model.status == "converged" and node.model.mh > -2.2
    ]


def make_star(index: int) -> Star:
    """The computed spectrum of one off-node atmosphere."""
    node = off_node.load()[index]
    model, vmic = node.model, node.vmic
    composition = composition_for(model.mh, model.alpha)
    iron = SOLAR_IRON + model.mh
    grid = velocity_grid(*RANGE)
    medium = make_medium(model, composition, iron, *RANGE)
    flux = relative_flux(medium, opacities_of(medium, everything(), vmic), grid)
    reduced = reduced_widths(model, composition, lines(), [vmic], [iron])[:, 0, 0]
    return Star(model.teff, model.logg, model.mh, vmic, grid, flux, 1e3 * 10.0**reduced * lines().wavelength_air)


def continuum_of(rng: np.random.Generator):
    """A smooth continuum: a slope, and a wave of a few per cent over some 100 Angstrom."""
    slope, size, phase, length = (
        rng.normal(0.0, 0.15),
        rng.uniform(0.0, 0.05),
        rng.uniform(0.0, 6.3),
        rng.uniform(150, 400),
    )
    return lambda w: 1e4 * (1.0 + slope * (w - 5800.0) / 1000.0 + size * np.sin(2.0 * np.pi * w / length + phase))


def known_neighbours(rng: np.random.Generator) -> SpectralLines:
    """What the fit knows of the neighbours."""
    others = everything().select(everything().own < 0)
    others = others.select(rng.random(len(others)) > UNKNOWN_PART)
    return others.with_columns(log_gf=others.log_gf + NEIGHBOUR_GF_ERROR * rng.standard_normal(len(others)))


def guess_of(star: Star, rng: np.random.Generator) -> Guess:
    """A guess of the star that is off."""
    return Guess(
        **{name: float(getattr(star, name) + error * rng.standard_normal()) for name, error in GUESS_ERRORS.items()}
    )


def observed(star: Star, resolving_power: float, signal_to_noise: float, rng, vsini: float | None = None) -> Spectrum:
    """One observation of a star with broadening of its own."""
    return observe(
        star.wavelength,
        star.flux,
        star="trial",
        resolving_power=resolving_power,
        signal_to_noise=signal_to_noise,
        rng=rng,
        vsini=rng.uniform(0.5, 6.0) if vsini is None else vsini,
        macroturbulence=rng.uniform(1.5, 5.0),
        continuum=continuum_of(rng),
    )


def trial(star: Star, spectrum: Spectrum, rng, **options) -> Measurements:
    """Measure one observation with imperfect knowledge."""
    known = lines().with_columns(log_gf=lines().log_gf + OWN_GF_ERROR * rng.standard_normal(len(lines())))
    chosen = MeasureOptions(guess=guess_of(star, rng), **options)
    return measure_lines(spectrum, known, known_neighbours(rng), chosen, windows=False)
