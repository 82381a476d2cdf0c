"""Made-up spectra of Gaussian lines: quick, and with a truth that does not come from our own line formation."""

from __future__ import annotations

import numpy as np

from specsolve.lines import LineList
from specsolve.lines.reading import default_line_list
from specsolve.spectrum.types import Spectrum

LIGHT_SPEED_KMS = 299792.458
STELLAR_SIGMA = 3.0  # km/s, thermal and turbulent together


def listed(low: float = 4800.0, high: float = 6900.0) -> LineList:
    """The default lines between two wavelengths [Angstrom]."""
    lines = default_line_list()
    return lines.select((lines.wavelength_air > low) & (lines.wavelength_air < high))


def rough_widths(lines: LineList) -> np.ndarray:
    """Widths [mA] that look like those of a giant; no physics."""
    return np.clip(60.0 * 10.0 ** (0.35 * (lines.log_gf - lines.excitation_potential + 4.5)), 5.0, 150.0)


def wavelengths(low: float, high: float, resolving_power: float = 50000.0, per_fwhm: float = 3.0) -> np.ndarray:
    """Pixels of equal steps in ln(wavelength) [Angstrom]."""
    return np.exp(np.arange(np.log(low), np.log(high), 1.0 / resolving_power / per_fwhm))


def gaussian_flux(wavelength, lines: LineList, width_ma, *, velocity=0.0, resolving_power=50000.0, vacuum=False):
    """Flux 1 minus Gaussian lines, moved by a velocity [km/s]."""
    from specsolve.lines import air_to_vacuum

    flux = np.ones(wavelength.size)
    own = np.hypot(LIGHT_SPEED_KMS / resolving_power / 2.3548, STELLAR_SIGMA)
    centres = air_to_vacuum(lines.wavelength_air) if vacuum else lines.wavelength_air
    for centre, width in zip(centres * (1.0 + velocity / LIGHT_SPEED_KMS), width_ma, strict=True):
        sigma = centre * own / LIGHT_SPEED_KMS
        low, high = np.searchsorted(wavelength, [centre - 6.0 * sigma, centre + 6.0 * sigma])
        depth = min(0.95, width * 1e-3 / (sigma * np.sqrt(2.0 * np.pi)))
        flux[low:high] *= 1.0 - depth * np.exp(-0.5 * ((wavelength[low:high] - centre) / sigma) ** 2)
    return flux


def unlisted(rng: np.random.Generator, low: float, high: float, n: int) -> tuple[LineList, np.ndarray]:
    """Lines that nobody predicts, at random places, and their widths [mA]."""
    lines = LineList.from_arrays(rng.uniform(low, high, n), np.full(n, "Fe I"), np.full(n, 3.0), np.full(n, -2.0))
    return lines, rng.uniform(0.0, 60.0, n)


def made_up(
    rng: np.random.Generator,
    *,
    velocity: float = 0.0,
    signal_to_noise: float = 100.0,
    resolving_power: float = 50000.0,
    low: float = 4800.0,
    high: float = 6900.0,
    n_unlisted: int = 600,
    vacuum: bool = False,
    star: str = "made up",
) -> Spectrum:
    """A noisy spectrum of the default lines, whose widths scatter by 0.4 in ln about `rough_widths`, and of others."""
    lines = listed(low, high)
    wave = wavelengths(low, high, resolving_power)
    widths = rough_widths(lines) * rng.lognormal(0.0, 0.4, len(lines))
    options = {"velocity": velocity, "resolving_power": resolving_power, "vacuum": vacuum}
    flux = gaussian_flux(wave, lines, widths, **options)
    flux *= gaussian_flux(wave, *unlisted(rng, low, high, n_unlisted), **options)
    flux += rng.normal(0.0, 1.0 / signal_to_noise, wave.size)
    return Spectrum.from_arrays(star, wave, flux, sigma=1.0 / signal_to_noise, resolving_power=resolving_power)
