"""Opacity of a layer in the channels that carry the energy: bands x sub-bins of line opacity, and pure continuum bands."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from specsolve.atmosphere.blanketing import Blanketing, line_opacity
from specsolve.matter.composition import Composition
from specsolve.matter.continuum import continuum_opacity
from specsolve.matter.equation_of_state import Gas, equilibrium
from specsolve.radiation.planck import band_planck

#: Edges [cm] of the bands without line opacity, below and above the range of the line tables.
SHORT_EDGES_CM = np.array([0.126, 0.137]) * 1e-4
LONG_EDGES_CM = np.array([3.0, 3.6, 4.5, 6.0, 8.0, 12.0, 20.0, 40.0, 100.0]) * 1e-4
REFERENCE_WAVELENGTH_CM = 5e-5  # the optical depth scale, 5000 A


@dataclass(frozen=True, kw_only=True)
class Channels:
    """Opacities of n_k channels at n points.

    Attributes
    ----------
    opacity, destruction, thermal : ndarray, shape (n_k, n)
        Total opacity [cm2 / g], absorbed fraction eps, and the channel's share of the Planck function
        [erg / (s cm2 sr)].
    reference_opacity : ndarray, shape (n,)
        Continuum opacity at 5000 A, absorption and scattering [cm2 / g].
    gas : Gas
        The state that they belong to.
    """

    opacity: np.ndarray
    destruction: np.ndarray
    thermal: np.ndarray
    reference_opacity: np.ndarray
    gas: Gas


def band_edges(blanketing: Blanketing) -> np.ndarray:
    """Edges of all bands, shape (n_bands + 1,) [cm]: short continuum, blanketed, long continuum."""
    inner = blanketing.band_edges_cm
    short = SHORT_EDGES_CM[inner[0] * 0.97 > SHORT_EDGES_CM]
    long = LONG_EDGES_CM[inner[-1] * 1.03 < LONG_EDGES_CM]
    return np.concatenate([short, inner, long])


def channels(
    temperature: np.ndarray,
    gas_pressure: np.ndarray,
    composition: Composition,
    blanketing: Blanketing,
    vmic: float,
    power: float = 1.0,
) -> Channels:
    """Opacities of all channels.

    Parameters
    ----------
    temperature, gas_pressure : ndarray, shape (n,)
        [K], [dyn / cm2].
    composition : Composition
    blanketing : Blanketing
        Line opacity table of this composition.
    vmic : float
        Microturbulence of the line opacity [km/s].
    power : float
        Exponent of the table's missing-opacity multiplier: 0 raw lists, 1 calibrated, 2 twice its logarithm.

    Returns
    -------
    Channels
        Ordered: short continuum bands, then band by band all sub-bins, then long continuum bands.
    """
    gas = equilibrium(temperature, gas_pressure, composition)
    edges = band_edges(blanketing)
    centres = np.sqrt(edges[1:] * edges[:-1])
    absorption, scattering = continuum_opacity(np.append(centres, REFERENCE_WAVELENGTH_CM), gas)
    reference = absorption[-1] + scattering[-1]
    absorption, scattering = absorption[:-1], scattering[:-1]
    planck = band_planck(edges, temperature)
    lines = line_opacity(blanketing, temperature, gas_pressure, vmic)  # (n_bands, n_sub, n)
    lines = lines * (blanketing.multiplier**power)[:, None, None]
    n_short = int(np.searchsorted(edges, blanketing.band_edges_cm[0] * 0.999))
    n_bands, n_sub, n = lines.shape
    middle = slice(n_short, n_short + n_bands)
    absorbed = absorption[middle, None, :] + lines
    total = absorbed + scattering[middle, None, :]
    share = planck[middle, None, :] * blanketing.sub_weights[None, :, None]

    def join(bare: np.ndarray, blanketed: np.ndarray) -> np.ndarray:
        inner = blanketed.reshape(n_bands * n_sub, n)
        return np.concatenate([bare[:n_short], inner, bare[n_short + n_bands :]])

    bare = absorption + scattering
    return Channels(
        opacity=join(bare, total),
        destruction=join(absorption / bare, absorbed / total),
        thermal=join(planck, share),
        reference_opacity=reference,
        gas=gas,
    )
