"""Quality flags of measured lines."""

from __future__ import annotations

import numpy as np

from specsolve.formation.spoilers import TELLURIC

from . import types as t
from .broadening import LIGHT_SPEED_KM_S

SATURATED_WIDTH = -4.85  # log10(W / lambda); as in `formation.spoilers`
BLEND_PART = 0.12
"""Light that predicted or found neighbours take in the line's core, over the line's own: above, the line is a blend."""
BLEND_ERROR = 0.03
"""... or above this part of the width as the error that the strengths of neighbours make."""
SIGNIFICANT = 4.0
"""Sigma of an asymmetry or a disagreement that is told."""
HIDDEN = 2.5
"""Sigma of a shift or a stretch that is told: most blends that no list knows show in nothing else ..."""
POSITION_ERROR = 0.15  # ... on top of what laboratory wavelengths may be off, 3 mA at 6000 Angstrom [km/s]
STRETCH_ERROR = 0.02  # ... and of what a line's own Doppler width may differ
"""The limits were chosen on computed spectra (`tests/spectrum/trials.py`): lower ones lose more good lines than they
catch blends."""
ASYMMETRY = 0.10  # and at least this part of the width
LARGE_CHI2 = 3.0  # reduced chi square of the core
DETECTION = 3.0  # sigma below which a line counts as absent
CONTINUUM_PART = 0.10  # continuum error over width
SPOILING = (
    t.FLAG_BLEND
    | t.FLAG_BAD_PIXELS
    | t.FLAG_COSMIC_RAY
    | t.FLAG_TELLURIC
    | t.FLAG_ASYMMETRIC
    | t.FLAG_ORDER_EDGE
    | t.FLAG_UPPER_LIMIT
    | t.FLAG_EMISSION
    | t.FLAG_NOT_COVERED
    | t.FLAG_SHIFTED
    | t.FLAG_CONTINUUM
    | t.FLAG_INTEGRATION_DIFFERS
    | t.FLAG_NOT_FITTED
)
"""A line with one of these is not used for a solve."""


def telluric(wavelength_air, velocity: float) -> np.ndarray:
    """True where a line falls on a band of the Earth's air, whose wavelengths are those of the observer.

    Parameters
    ----------
    wavelength_air : ndarray
        Rest wavelengths [Angstrom].
    velocity : float
        Velocity that was taken out of the spectrum [km/s].

    Examples
    --------
    >>> telluric([6290.0, 6400.0], 0.0).tolist()
    [True, False]
    """
    observed = np.asarray(wavelength_air, float) * (1.0 + velocity / LIGHT_SPEED_KM_S)
    return np.any([(low <= observed) & (observed <= high) for low, high, _ in TELLURIC], axis=0)


def flags_of(
    *,
    width,
    error,
    noise_error,
    continuum_error,
    neighbour_error,
    contamination,
    relative_width,
    shift,
    shift_error,
    stretch,
    stretch_error,
    asymmetry,
    asymmetry_error,
    difference,
    difference_error,
    chi2,
    bad,
    cosmic,
    edge,
    telluric,
) -> np.ndarray:
    """Flags of all lines from the numbers of the fit, arrays of shape (n_lines,).

    Parameters
    ----------
    width, error, noise_error, continuum_error, neighbour_error : ndarray
        [mA]; the last from the strengths of predicted and found neighbours.
    contamination : ndarray
        Light of neighbours in the core over the line's.
    relative_width : ndarray
        W / lambda.
    shift, shift_error, stretch, stretch_error : ndarray
        Of the position and of ln of the width's factor, errors with their priors.
    asymmetry, asymmetry_error, difference, difference_error : ndarray
        Blue minus red half, and integrated minus fitted width, over the width.
    chi2 : ndarray
    bad, cosmic, edge, telluric : ndarray of bool
    """
    flags = np.zeros(np.shape(width), np.int64)

    def put(condition, flag):
        flags[np.asarray(condition, bool)] |= flag

    with np.errstate(invalid="ignore", divide="ignore"):
        absent = width < DETECTION * error
        put(absent, t.FLAG_UPPER_LIMIT)
        put(width < -DETECTION * error, t.FLAG_EMISSION)
        put((contamination > BLEND_PART) | (neighbour_error > BLEND_ERROR * np.abs(width)), t.FLAG_BLEND)
        odd = np.abs(stretch) > HIDDEN * np.hypot(stretch_error, STRETCH_ERROR)
        put(~absent & (odd | (chi2 > LARGE_CHI2)), t.FLAG_BLEND)
        put(~absent & (np.abs(shift) > HIDDEN * np.hypot(shift_error, POSITION_ERROR)), t.FLAG_SHIFTED)
        put(
            ~absent & (np.abs(asymmetry) > np.maximum(ASYMMETRY, SIGNIFICANT * asymmetry_error)),
            t.FLAG_ASYMMETRIC,
        )
        put(
            ~absent & (np.abs(difference) > np.maximum(ASYMMETRY, SIGNIFICANT * difference_error)),
            t.FLAG_INTEGRATION_DIFFERS,
        )
        put(np.log10(np.maximum(relative_width, 1e-12)) > SATURATED_WIDTH, t.FLAG_SATURATED)
        put(continuum_error > CONTINUUM_PART * np.abs(width), t.FLAG_CONTINUUM)
    put(bad, t.FLAG_BAD_PIXELS)
    put(cosmic, t.FLAG_COSMIC_RAY)
    put(edge, t.FLAG_ORDER_EDGE)
    put(telluric, t.FLAG_TELLURIC)
    return flags
