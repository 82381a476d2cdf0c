"""What is expected in a spectrum beforehand: lines, their widths and their shapes, for a guess of the star.

The guess only says which lines are where, about how strong, and what an unbroadened line of a given width looks
like; the widths that are measured do not follow from it.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from specsolve.atmosphere.blanketing_lines import load_lines
from specsolve.atmosphere.store import AtmosphereStore
from specsolve.constants import SOLAR_IRON
from specsolve.errors import InputError
from specsolve.formation.spectral_lines import SpectralLines
from specsolve.formation.synthesis import (
    Medium,
    central_ratios,
    line_profiles,
    line_widths,
    make_medium,
    opacities_of,
    velocity_points,
)
from specsolve.lines import LineList
from specsolve.matter.composition import composition_for

from .broadening import LIGHT_SPEED_KM_S, Kernel

OWN_STEP = 0.4  # dex
OWN_DA = np.arange(-4, 5) * OWN_STEP
"""Abundances, relative to the guess, at which the shapes of the lines to measure are computed [dex]."""
FAMILY_DA = np.arange(-2.5, 5.1, 0.5)
"""The same for the one line whose shapes stand for those of all neighbours [dex]."""
FAMILY_LINE = (5500.0, "Fe I", 3.0, -2.5)
N_TABLE = 1024
TABLE_STEP = 0.4  # km/s: the tables reach 410 km/s
LEAST_CENTRAL_RATIO = 3e-4
"""Neighbours whose central opacity is below this part of the continuum's are left out: their widths stay below 0.02 mA;
all of them together take less than 0.02 % of the light of the Sun."""
WEAK_CENTRAL_RATIO = 5e-3
"""Below this a width is proportional to the central opacity."""
PREDICTION_LAYERS = 40
LIMITS = (4350.0, 8050.0)  # Angstrom, where the table of neighbours is complete


@dataclass(frozen=True, kw_only=True)
class Guess:
    """About what star it is.

    Attributes
    ----------
    teff, logg, mh, vmic : float
        [K], [dex cgs], [dex], [km/s].

    Examples
    --------
    >>> Guess(teff=5000.0, logg=2.5, mh=-0.5).vmic
    1.5
    """

    teff: float = 5500.0
    logg: float = 4.0
    mh: float = -0.2
    vmic: float = 1.5


@dataclass(frozen=True, kw_only=True, eq=False)
class Prediction:
    """Expected lines, in order of wavelength.

    Attributes
    ----------
    lines : SpectralLines
    relative_width : ndarray, shape (n_lines,)
        W / lambda.
    own_shape : ndarray of int, shape (n_lines,)
        First row of the line's own shapes; -1 where the family's shapes serve.
    shape_width : ndarray, shape (n_rows,)
        log10(W / lambda) of each row of the shapes, increasing within a line and within the family.
    shapes : ndarray, shape (n_rows, n_frequencies)
        Fourier transforms of unbroadened shapes of unit area [1 / (km/s)].
    family : slice
        Rows of the family.
    """

    lines: SpectralLines
    relative_width: np.ndarray
    own_shape: np.ndarray
    shape_width: np.ndarray
    shapes: np.ndarray
    family: slice

    def broadened(self, kernel: Kernel) -> np.ndarray:
        """Shapes after the common broadening at velocities 0, 1, 2 ... times `TABLE_STEP`, shape (n_rows, n)."""
        return np.fft.irfft(self.shapes * kernel.transform(2 * N_TABLE, TABLE_STEP), axis=1)[:, :N_TABLE]

    def rows_for(self, source: np.ndarray, relative_width: np.ndarray, wing: np.ndarray):
        """Row below, and the share of the row above, for own lines of a width, `wing` steps further along the shapes."""
        logarithm = np.log10(np.maximum(relative_width, 1e-9))
        first = self.own_shape[source]
        rows = first[:, None] + np.arange(OWN_DA.size)
        known = self.shape_width[rows]
        below = np.clip((logarithm[:, None] > known).sum(axis=1) - 1, 0, OWN_DA.size - 2)
        at = np.arange(source.size)
        low, high = known[at, below], known[at, below + 1]
        place = below + np.clip((logarithm - low) / (high - low), 0.0, 1.0) + wing
        place = np.clip(place, 0.0, OWN_DA.size - 1.0)
        below = np.minimum(place.astype(np.int64), OWN_DA.size - 2)
        return first + below, place - below

    def scaled(self, dA: float) -> np.ndarray:
        """W / lambda if all lines had dA more opacity [dex], by the family's curve of growth."""
        widths = self.shape_width[self.family]
        logarithm = np.log10(self.relative_width)
        at = np.interp(logarithm, widths, FAMILY_DA)
        slope = np.interp(at + dA, FAMILY_DA, widths) - np.interp(at, FAMILY_DA, widths)
        inside = logarithm > widths[0]
        return self.relative_width * 10.0 ** np.where(inside, slope, dA)


@lru_cache(maxsize=1)
def atmospheres() -> AtmosphereStore:
    """The packaged atmospheres."""
    return AtmosphereStore.packaged()


@lru_cache(maxsize=1)
def packaged_neighbours() -> SpectralLines:
    """Lines of all elements in `LIMITS`, from the packaged table of the blanketing."""
    return SpectralLines.of_blanketing(load_lines(), *LIMITS)


def nearest_atmosphere(guess: Guess):
    """The packaged atmosphere nearest to the guess, in steps of the axes.

    Raises
    ------
    InputError
        The guess lies outside the packaged atmospheres by more than a step.
    """
    store = atmospheres()
    steps = {"teff": 250.0, "logg": 0.5, "mh": 0.5}
    for name, step in steps.items():
        value, axis = getattr(guess, name), store.axes[name]
        if not axis.min() - step <= value <= axis.max() + step:
            raise InputError(
                f"the guess {name} = {value:g} lies outside the packaged atmospheres ({axis.min():g} to {axis.max():g})."
            )
    nodes = np.array([n for n in store.nodes() if store.has(*n)])
    distance = sum(((nodes[:, i] - getattr(guess, n)) / s) ** 2 for i, (n, s) in enumerate(steps.items()))
    return store.get(*nodes[int(np.argmin(distance))])


def predict(lines: LineList, guess: Guess, neighbours: SpectralLines | None = None) -> Prediction:
    """Predict the lines of a list and their neighbours.

    Parameters
    ----------
    lines : LineList
    guess : Guess
    neighbours : SpectralLines, optional
        Further lines; the packaged ones within 12 Angstrom of a line if not given. Those that are lines of the list are
        left out.

    Returns
    -------
    Prediction
    """
    own = SpectralLines.of(lines)
    further = packaged_neighbours() if neighbours is None else neighbours
    distance = np.searchsorted(own.wavelength_air, further.wavelength_air + 12.0) - np.searchsorted(
        own.wavelength_air, further.wavelength_air - 12.0
    )
    everything = own.joined(further.select(distance > 0).without(own))
    atmosphere = nearest_atmosphere(guess)
    composition = composition_for(guess.mh, atmosphere.alpha)
    low, high = everything.wavelength_air[0] - 1.0, everything.wavelength_air[-1] + 1.0
    medium = make_medium(atmosphere, composition, SOLAR_IRON + guess.mh, low, high, PREDICTION_LAYERS)
    return from_medium(medium, everything, guess.vmic)


def from_medium(medium: Medium, everything: SpectralLines, vmic: float) -> Prediction:
    """Widths and shapes of lines in one atmosphere."""
    others = everything.select(everything.own < 0)
    ratio = central_ratios(medium, others, vmic)
    near = opacities_of(medium, others.select(ratio > WEAK_CENTRAL_RATIO), vmic, -1.0)
    near_width = line_widths(medium, near, n_points=11)[:, 0]
    near_ratio = ratio[ratio > WEAK_CENTRAL_RATIO]
    faint = (ratio > LEAST_CENTRAL_RATIO) & (ratio <= WEAK_CENTRAL_RATIO)
    weak = near_ratio < 4.0 * WEAK_CENTRAL_RATIO
    per_ratio = np.median(near_width[weak] / near_ratio[weak]) if weak.any() else 0.0
    neighbours = near.lines.joined(others.select(faint))
    order = np.argsort(np.concatenate([near.lines.wavelength_air, others.wavelength_air[faint]]), kind="stable")
    neighbour_width = np.concatenate([near_width, per_ratio * ratio[faint]])[order]
    own = opacities_of(medium, everything.select(everything.own >= 0), vmic, -1.0)
    family = opacities_of(medium, _family_line(), vmic, -1.0)
    velocity, weights = velocity_points(41)
    own_depths = line_profiles(medium, own, velocity, OWN_DA)
    family_depths = line_profiles(medium, family, velocity, FAMILY_DA)
    depths = np.concatenate([own_depths.reshape(-1, velocity.size), family_depths[0]])
    widths = depths @ weights
    lines = own.lines.joined(neighbours)
    order = np.argsort(np.concatenate([own.lines.wavelength_air, neighbours.wavelength_air]), kind="stable")
    centre = int(np.argmin(np.abs(OWN_DA)))
    relative = np.concatenate(
        [
            own_depths[:, centre] @ weights / LIGHT_SPEED_KM_S,
            neighbour_width,
        ]
    )
    shape = np.concatenate([np.arange(len(own.lines)) * OWN_DA.size, np.full(len(neighbours), -1)])
    return Prediction(
        lines=lines,
        relative_width=np.maximum(relative[order], 1e-9),
        own_shape=shape[order],
        shape_width=np.log10(widths / LIGHT_SPEED_KM_S),
        shapes=_transforms(velocity, depths / widths[:, None]),
        family=slice(len(own.lines) * OWN_DA.size, widths.size),
    )


def _family_line() -> SpectralLines:
    wavelength, ion, energy, log_gf = FAMILY_LINE
    return SpectralLines.of(LineList.from_arrays([wavelength], [ion], [energy], [log_gf]))


def _transforms(velocity: np.ndarray, shapes: np.ndarray) -> np.ndarray:
    """Fourier transforms of half shapes on a periodic grid of 2 `N_TABLE` steps; area one."""
    from scipy.interpolate import CubicSpline

    grid = np.arange(N_TABLE + 1) * TABLE_STEP
    spline = CubicSpline(np.arcsinh(velocity / 3.0), shapes, axis=1)
    half = np.where(grid <= velocity[-1], spline(np.arcsinh(grid / 3.0)), 0.0)
    full = np.concatenate([half, half[:, -2:0:-1]], axis=1)
    return np.fft.rfft(full, axis=1).real
