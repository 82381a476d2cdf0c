"""How well widths are measured in a rehearsal: from S/N and resolving power, or from an error law; and spoiled lines."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from specsolve.errors import UsageError

PIXELS_PER_FWHM = 3.0  # sampling of a usual spectrograph (common practice, no source)
CAYREL_FACTOR = 1.5
LEAST_SIGNIFICANCE = 3.0  # widths below so many errors are not measured
# A spoiled width is multiplied or divided by a factor in this range: blends, cosmic rays, a wrong continuum (invented).
SPOILED_FACTOR = (1.25, 1.8)


@dataclass(frozen=True)
class Noise:
    """Errors of measured widths.

    Attributes
    ----------
    signal_to_noise : float
        Per pixel; nan where an error law is used.
    resolving_power : float
        lambda / FWHM; nan with a law.
    pixels_per_fwhm : float
    floor_ma, fraction : float
        The law: floor [mA] and fraction of the width in quadrature; nan without.
    bad_lines : float
        Fraction of lines that are spoiled; their stated errors do not know of it.

    Examples
    --------
    >>> noise = Noise(signal_to_noise=100.0, resolving_power=40000.0)
    >>> noise.width_error(np.array([6000.0]), np.array([50.0])).round(2)
    array([1.3])
    """

    signal_to_noise: float = float("nan")
    resolving_power: float = float("nan")
    pixels_per_fwhm: float = PIXELS_PER_FWHM
    floor_ma: float = float("nan")
    fraction: float = float("nan")
    bad_lines: float = 0.0

    def __post_init__(self) -> None:
        law = np.isfinite(self.floor_ma)
        if law == np.isfinite(self.resolving_power):
            raise UsageError("give either signal to noise with a resolving power, or an error law of the widths")
        if law and not (self.floor_ma >= 0.0 and self.fraction >= 0.0 and self.floor_ma + self.fraction > 0.0):
            raise UsageError(
                f"error law {self.floor_ma:g} mA and {self.fraction:g}: both must not be negative, one positive"
            )
        if not law and not self.resolving_power > 0.0:
            raise UsageError(f"resolving power {self.resolving_power:g} must be positive")
        if not 0.0 <= self.bad_lines < 0.5:
            raise UsageError(f"fraction of bad lines {self.bad_lines:g} must lie between 0 and 0.5")

    def width_error(self, wavelength_air: np.ndarray, width_ma: np.ndarray, signal_to_noise: float | None = None):
        """Error of a width [mA]: the law, or 1.5 sqrt(FWHM pixel) / (S/N).

        Source of the second: Cayrel 1988, IAU Symposium 132, 345 (from memory).
        """
        if np.isfinite(self.floor_ma):
            return np.hypot(self.floor_ma, self.fraction * width_ma)
        value = self.signal_to_noise if signal_to_noise is None else signal_to_noise
        fwhm = wavelength_air / self.resolving_power
        return 1e3 * CAYREL_FACTOR * fwhm / np.sqrt(self.pixels_per_fwhm) / value

    def observe(
        self, widths: np.ndarray, errors: np.ndarray, rng: np.random.Generator
    ) -> tuple[np.ndarray, np.ndarray]:
        """Measured widths [mA] and the mask of those that are significant enough to be reported."""
        measured = widths + errors * rng.standard_normal(widths.size)
        spoiled = rng.random(widths.size) < self.bad_lines
        factor = rng.uniform(*SPOILED_FACTOR, widths.size)
        up = rng.random(widths.size) < 0.5
        measured = np.where(spoiled, measured * np.where(up, factor, 1.0 / factor), measured)
        return measured, measured > LEAST_SIGNIFICANCE * errors
