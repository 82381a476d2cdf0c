"""One factor per band on the line opacity, fixed once on the flux distribution of the Sun.

The line lists lack molecules, hydrogen and part of the ultraviolet. In each band below 0.7 um the factor is the one with
which a model of the Sun emits the observed flux, never less than 1; the logarithm times `FRACTION` is kept, because the
full correction overshoots the limb darkening at 0.45-0.55 um. Below the observed range, 290 nm, the factor of the bluest
observed band is taken over down to `SHORTEST_NM`; nothing is known there. Observed: the extraterrestrial spectrum of
ASTM G173-03 (Gueymard 2004, Solar Energy 76, 423), as the package pvlib carries it, averaged over the bands in the
packaged `solar_flux.csv`.

    python -m specsolve.atmosphere.blanketing_calibration --output DIR --solar-flux   # makes solar_flux.csv (needs pvlib)
    python -m specsolve.atmosphere.blanketing_calibration --output DIR                # makes multiplier.csv (half a minute)
"""

from __future__ import annotations

import argparse
from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import numpy as np

from specsolve.atmosphere.blanketing_lines import DATA_FOLDER

#: Astronomical unit over the nominal solar radius (IAU 2012 resolution B2, 2015 resolution B3), squared.
DILUTION = (1.495978707e13 / 6.957e10) ** 2
#: 1 W m^-2 nm^-1 in erg s^-1 cm^-2 cm^-1.
IRRADIANCE_CGS = 1e3 * 1e7
#: Bands that reach above this wavelength are not calibrated [nm]: there the lists suffice.
LONGEST_NM = 700.0
#: Part of the logarithm of the full correction that is kept.
FRACTION = 0.75
#: Bands below the observed range take over the bluest observed factor down to this wavelength [nm].
SHORTEST_NM = 200.0
#: Bounds of the full correction; a band that needs more is not calibrated.
LARGEST_MULTIPLIER = 30.0


@dataclass(frozen=True, kw_only=True)
class SolarFlux:
    """Flux at the Sun's surface averaged over bands.

    Attributes
    ----------
    low_nm, high_nm : ndarray, shape (n,)
        Edges [nm].
    flux : ndarray, shape (n,)
        Mean astrophysical flux, integral of I cos(theta) over solid angle [erg s^-1 cm^-2 cm^-1].
    """

    low_nm: np.ndarray
    high_nm: np.ndarray
    flux: np.ndarray


def load_solar_flux(path: Path = DATA_FOLDER / "solar_flux.csv") -> SolarFlux:
    """The packaged band averages.

    Examples
    --------
    >>> sun = load_solar_flux()
    >>> bool(np.all(sun.flux > 0))
    True
    """
    low, high, irradiance = np.loadtxt(path, delimiter=",", comments="#", unpack=True)
    return SolarFlux(low_nm=low, high_nm=high, flux=irradiance * IRRADIANCE_CGS * DILUTION)


def observed_in_bands(band_edges_cm: np.ndarray, sun: SolarFlux) -> np.ndarray:
    """Observed flux of those bands that the table has, `nan` elsewhere; shape (n_bands,)."""
    edges_nm = band_edges_cm * 1e7
    observed = np.full(len(edges_nm) - 1, np.nan)
    for i, (low, high) in enumerate(pairwise(edges_nm)):
        match = np.isclose(sun.low_nm, low, atol=1e-3) & np.isclose(sun.high_nm, high, atol=1e-3)
        if match.any():
            observed[i] = sun.flux[match][0]
    return observed


def calibrate(
    band_flux: Callable[[np.ndarray], np.ndarray],
    band_edges_cm: np.ndarray,
    sun: SolarFlux,
    tolerance: float = 1e-4,
) -> np.ndarray:
    """Full correction: the factors with which every band emits the observed flux.

    Parameters
    ----------
    band_flux : callable
        From factors (n_bands,) to the emergent flux averaged over each band (n_bands,), same unit as `SolarFlux.flux`.
        The flux of a band may depend on the factor of that band only (fixed structure): all are solved together.
    band_edges_cm : ndarray, shape (n_bands + 1,)
    sun : SolarFlux
    tolerance : float
        Relative, in the flux.

    Returns
    -------
    ndarray, shape (n_bands,)
        1 for bands above `LONGEST_NM` or without observation, `nan` where no factor within `LARGEST_MULTIPLIER` and its
        inverse gives the observed flux. Iterate with the structure converged anew. Keep `multiplier ** FRACTION`.

    Examples
    --------
    >>> edges = np.array([4e-5, 5e-5])
    >>> sun = SolarFlux(low_nm=np.array([400.0]), high_nm=np.array([500.0]), flux=np.array([0.5]))
    >>> round(float(calibrate(lambda m: 1.0 / (1.0 + m / 2.0), edges, sun)[0]), 3)
    2.0
    """
    observed = observed_in_bands(band_edges_cm, sun)
    wanted = np.isfinite(observed) & (band_edges_cm[1:] * 1e7 <= LONGEST_NM + 1e-3)
    low = np.where(wanted, -np.log(LARGEST_MULTIPLIER), 0.0)
    high = np.where(wanted, np.log(LARGEST_MULTIPLIER), 0.0)
    reachable = (band_flux(np.exp(low)) >= observed) & (band_flux(np.exp(high)) <= observed)
    middle = 0.5 * (low + high)
    for _ in range(60):
        middle = 0.5 * (low + high)
        flux = band_flux(np.exp(middle))
        error = np.where(wanted & reachable, flux / observed - 1.0, 0.0)
        if np.max(np.abs(error)) <= tolerance:
            break
        low, high = np.where(error > 0.0, middle, low), np.where(error > 0.0, high, middle)
    return np.where(wanted, np.where(reachable, np.exp(middle), np.nan), 1.0)


def save_multiplier(band_edges_cm: np.ndarray, multiplier: np.ndarray, path: Path) -> None:
    """Write the factors of all bands; they must be positive numbers."""
    if not np.all(np.isfinite(multiplier) & (multiplier > 0.0)):
        raise ValueError(f"not a factor in every band: {multiplier}")
    edges = band_edges_cm * 1e7
    header = (
        "Factor on the line opacity of each band, calibrated on the solar flux\n"
        "(specsolve.atmosphere.blanketing_calibration); 1 where nothing is calibrated. Vacuum wavelengths.\n"
        "wavelength_low_nm,wavelength_high_nm,multiplier"
    )
    np.savetxt(
        path,
        np.column_stack([edges[:-1], edges[1:], multiplier]),
        fmt=["%.1f", "%.1f", "%.5f"],
        delimiter=",",
        header=header,
    )


def average_bands(
    low_nm: np.ndarray, high_nm: np.ndarray, wavelength_nm: np.ndarray, irradiance: np.ndarray
) -> np.ndarray:
    """Means of a tabulated spectrum, linear between its points, between pairs of wavelengths."""
    steps = 0.5 * (irradiance[1:] + irradiance[:-1]) * np.diff(wavelength_nm)
    total = np.concatenate([[0.0], np.cumsum(steps)])

    def integral(x):
        cell = np.clip(np.searchsorted(wavelength_nm, x) - 1, 0, len(wavelength_nm) - 2)
        ahead = x - wavelength_nm[cell]
        slope = np.diff(irradiance)[cell] / np.diff(wavelength_nm)[cell]
        return total[cell] + irradiance[cell] * ahead + 0.5 * slope * ahead**2

    return (integral(high_nm) - integral(low_nm)) / (high_nm - low_nm)


def calibrate_on_the_sun(passes: int = 6, points: int = 5) -> tuple[np.ndarray, np.ndarray]:
    """Band edges [cm] and kept factors, the model of the Sun being converged anew between the passes.

    Returns
    -------
    band_edges_cm : ndarray, shape (n_bands + 1,)
    multiplier : ndarray, shape (n_bands,)
    """
    from dataclasses import replace

    from specsolve.atmosphere.blanketing import load_blanketing
    from specsolve.atmosphere.emergent import emergent_flux
    from specsolve.atmosphere.structure import solve_structure
    from specsolve.constants import SOLAR_LOGG, SOLAR_TEFF
    from specsolve.matter.composition import composition_for

    raw = load_blanketing(0.0)
    edges, sun, model = raw.band_edges_cm, load_solar_flux(), None
    wanted = np.isfinite(observed_in_bands(edges, sun)) & (edges[1:] * 1e7 <= LONGEST_NM + 1e-3)
    offsets = (np.arange(points) + 0.5) / points
    wavelengths = edges[:-1, None] + np.diff(edges)[:, None] * offsets
    full = np.ones(len(wanted))
    for _ in range(passes):
        model = solve_structure(
            SOLAR_TEFF, SOLAR_LOGG, composition_for(0.0), replace(raw, multiplier=full), start=model
        )

        def band_flux(factors: np.ndarray, model=model) -> np.ndarray:
            return (
                emergent_flux(model, wavelengths.ravel(), replace(raw, multiplier=factors))
                .reshape(-1, points)
                .mean(axis=1)
            )

        found = calibrate(band_flux, edges, sun, tolerance=1e-3)
        full = np.where(wanted & np.isfinite(found), np.maximum(found, 1.0), full)
        bluest = int(np.argmax(wanted))
        full = np.where((np.arange(len(full)) < bluest) & (edges[:-1] * 1e7 > SHORTEST_NM), full[bluest], full)
    return edges, full**FRACTION


def main(arguments: list[str] | None = None) -> None:
    """Command line of the module: band averages of the solar spectrum."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--output", type=Path, required=True)
    parser.add_argument("--solar-flux", action="store_true", help="make the table of observed fluxes instead")
    options = parser.parse_args(arguments)
    if not options.solar_flux:
        save_multiplier(*calibrate_on_the_sun(), options.output / "multiplier.csv")
        return
    import pvlib

    from specsolve.atmosphere.blanketing_build import BAND_EDGES_NM

    spectrum = pvlib.spectrum.get_reference_spectra(standard="ASTM G173-03")["extraterrestrial"]
    wavelength, irradiance = spectrum.index.to_numpy(dtype=float), spectrum.to_numpy(dtype=float)
    covered = BAND_EDGES_NM[np.searchsorted(BAND_EDGES_NM, wavelength[0]) :]
    blocks = np.arange(700.0, 2501.0, 50.0)
    low, high = np.append(covered[:-1], blocks[:-1]), np.append(covered[1:], blocks[1:])
    header = (
        "Solar irradiance at one astronomical unit, mean over each band: the opacity bands, then blocks of 50 nm.\n"
        f"Extraterrestrial spectrum of ASTM G173-03 (Gueymard 2004, Solar Energy 76, 423), "
        f"from pvlib {pvlib.__version__}.\n"
        "wavelength_low_nm,wavelength_high_nm,irradiance_W_m2_nm"
    )
    table = np.column_stack([low, high, average_bands(low, high, wavelength, irradiance)])
    np.savetxt(options.output / "solar_flux.csv", table, fmt=["%.1f", "%.1f", "%.5f"], delimiter=",", header=header)


if __name__ == "__main__":
    main()
