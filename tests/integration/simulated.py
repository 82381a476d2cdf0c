"""Simulated stars: widths of a grid or of the full engine, noise of the widths, scatter of the star, errors of log gf.

Nothing here is a real star. A `Regime` says from where the truths are drawn and what is measured of them; the microturbulence
follows the published relation with its own scatter where there is one, and a flat distribution elsewhere, because that
is what the odds of the tie-break rule assume.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from specsolve.balance.relations import vmic_relation
from specsolve.balance.star import Star
from specsolve.constants import SOLAR_IRON

VMIC_RANGE = (0.4, 2.8)  # km/s, of the flat distribution and of the scatter about the relation
SELECTED = (-6.2, -4.6)  # log10(W/lambda), by the list's log gf, of lines that an observer measures
DETECTED = 2.5  # the same in errors of the width


@dataclass(frozen=True, kw_only=True)
class Regime:
    """Where truths come from and what is measured.

    Attributes
    ----------
    name : str
    teff, logg, feh : (float, float)
        Flat between these [K, dex, dex].
    n_fe1, n_fe2 : (int, int)
        Number of lines, flat; all that qualify where there are fewer.
    noise : (float, float)
        Error of a width as a share of it, flat; one value a star.
    floor_ma : float
        Added in quadrature [mA].
    scatter : float
        The star's own line-to-line term [dex].
    gf_share : float
        True log gf errors over those that the list states.
    """

    name: str
    teff: tuple[float, float]
    logg: tuple[float, float]
    feh: tuple[float, float]
    n_fe1: tuple[int, int] = (300, 300)
    n_fe2: tuple[int, int] = (300, 300)
    noise: tuple[float, float] = (0.03, 0.03)
    floor_ma: float = 1.0
    scatter: float = 0.0
    gf_share: float = 1.0


@dataclass(frozen=True)
class Simulated:
    """A star with its truth (teff, logg, feh, vmic)."""

    star: Star
    truth: np.ndarray
    regime: Regime


def draw_truth(regime: Regime, rng: np.random.Generator) -> np.ndarray:
    """teff, logg, feh flat; vmic from the relation where it holds, flat elsewhere."""
    teff, logg, feh = (rng.uniform(*limits) for limits in (regime.teff, regime.logg, regime.feh))
    relation = vmic_relation(teff, logg)
    while True:
        vmic = rng.uniform(*VMIC_RANGE) if relation is None else rng.normal(relation.vmic, relation.sigma)
        if VMIC_RANGE[0] <= vmic <= VMIC_RANGE[1]:
            return np.array([teff, logg, feh, vmic])


def measured(
    widths,
    lines,
    truth: np.ndarray,
    regime: Regime,
    rng: np.random.Generator,
    name: str,
    gf_errors: np.ndarray | None = None,
    grades: int = 3,
    noise: np.random.Generator | None = None,
) -> Simulated | None:
    """A star measured once.

    Parameters
    ----------
    widths : callable
        From A(Fe) of each line, shape (n_lines,), to its log10(W/lambda).
    lines : LineList
        Of the grid.
    truth : ndarray, shape (4,)
    regime : Regime
    rng : Generator
    name : str
    gf_errors : ndarray, shape (n_lines,), optional
        True minus listed log gf [dex]; drawn anew if not given.
    grades : int
        Worst grade of the lines that the observer has.
    noise : Generator, optional
        Of all errors, so that the same lines can be measured again; `rng` if not given.

    Returns
    -------
    Simulated, or None where too few lines qualify.
    """
    n = len(lines)
    noise = noise or rng
    if gf_errors is None:
        gf_errors = regime.gf_share * lines.log_gf_error * noise.normal(size=n)
    own = regime.scatter * noise.normal(size=n)
    # Lines are chosen by what the list predicts: a choice by what is measured would itself bias the parameters.
    expected, log_rw = (widths(SOLAR_IRON + truth[2] + d) for d in (np.zeros(n), gf_errors + own))
    share = rng.uniform(*regime.noise)
    scale = lines.wavelength_air * 1e3
    with np.errstate(invalid="ignore"):
        seen = np.isfinite(log_rw) & (expected > SELECTED[0]) & (expected < SELECTED[1]) & (lines.grade <= grades)
        seen &= scale * 10.0**expected > DETECTED * np.hypot(share * scale * 10.0**expected, regime.floor_ma)
    places = []
    for ion, limits in (("Fe I", regime.n_fe1), ("Fe II", regime.n_fe2)):
        of_ion = np.flatnonzero(seen & (lines.ion == ion))
        wanted = int(rng.integers(limits[0], limits[1] + 1))
        places.append(rng.choice(of_ion, min(wanted, of_ion.size), replace=False))
    if places[0].size < 8 or places[1].size < 1:
        return None
    chosen = np.sort(np.concatenate(places))
    width = scale[chosen] * 10.0 ** log_rw[chosen]
    error = np.hypot(share * width, regime.floor_ma)
    observed = width + error * noise.normal(size=chosen.size)
    good = observed > 0.0
    chosen, observed, error = chosen[good], observed[good], error[good]
    star = Star.from_arrays(
        name,
        lines.wavelength_air[chosen],
        lines.ion[chosen],
        observed,
        error,
        excitation_potential=lines.excitation_potential[chosen],
    )
    return Simulated(star, truth, regime)


def with_blends(star: Star, share: float, factor: float, rng: np.random.Generator) -> Star:
    """The same star with some of its widths raised; both ions alike."""
    hit = rng.random(len(star.equivalent_width)) < share
    return replace(star, equivalent_width=np.where(hit, factor * star.equivalent_width, star.equivalent_width))
