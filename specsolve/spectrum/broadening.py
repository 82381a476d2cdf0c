"""What broadens all lines of a spectrum alike: the instrument, rotation, macroturbulence.

Velocities in km/s. Every profile has unit area; on a grid of equal velocity steps a convolution is a product of Fourier
transforms. Rotation: Gray 2008, The Observation and Analysis of Stellar Photospheres, eq. 18.14, with linear limb
darkening; macroturbulence: Gaussian, or radial-tangential with equal parts (Gray 2008, ch. 17) averaged over the disc.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

LIGHT_SPEED_KM_S = 299792.458
FWHM_PER_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))
LIMB_DARKENING = 0.6
"""Linear coefficient near 5500 Angstrom; common practice, no source."""
ROTATION_TO_SIGMA = np.sqrt((1.0 - LIMB_DARKENING * 7.0 / 15.0) / (4.0 * (1.0 - LIMB_DARKENING / 3.0)))
"""Standard deviation of the rotation profile over v sin i."""


def gaussian(velocity, fwhm: float) -> np.ndarray:
    """Gaussian of unit area.

    Examples
    --------
    >>> v = np.linspace(-20.0, 20.0, 4001)
    >>> round(float(gaussian(v, 5.0).sum() * 0.01), 6)
    1.0
    """
    sigma = fwhm / FWHM_PER_SIGMA
    return np.exp(-0.5 * (np.asarray(velocity, float) / sigma) ** 2) / (sigma * np.sqrt(2.0 * np.pi))


def rotation(velocity, vsini: float, limb_darkening: float = LIMB_DARKENING) -> np.ndarray:
    """Rotation profile of unit area; Gray 2008, eq. 18.14.

    Examples
    --------
    >>> v = np.linspace(-20.0, 20.0, 4001)
    >>> round(float(rotation(v, 10.0).sum() * 0.01), 3)
    1.0
    """
    x2 = np.maximum(1.0 - (np.asarray(velocity, float) / vsini) ** 2, 0.0)
    top = 2.0 * (1.0 - limb_darkening) * np.sqrt(x2) + 0.5 * np.pi * limb_darkening * x2
    return top / (np.pi * vsini * (1.0 - limb_darkening / 3.0))


def radial_tangential(velocity, dispersion: float) -> np.ndarray:
    """Radial-tangential macroturbulence of unit area, equal parts, averaged over the disc with limb darkening.

    The velocity field is Gaussian, exp(-(v / dispersion)^2), along the radius and along the tangent; Gray 2008, ch. 17.
    """
    light, widths = _rings(dispersion)
    return sum(
        part * gaussian(velocity, FWHM_PER_SIGMA * w / np.sqrt(2.0)) for part, w in zip(light, widths, strict=True)
    )


@dataclass(frozen=True, kw_only=True)
class Kernel:
    """Common broadening of all lines.

    Attributes
    ----------
    fwhm : float
        Of a Gaussian, the instrument [km/s].
    vsini : float
        Rotation [km/s]; 0 for none.
    macroturbulence : float
        Radial-tangential dispersion [km/s]; 0 for none.

    Examples
    --------
    >>> Kernel(fwhm=3.0).total
    3.0
    """

    fwhm: float
    vsini: float = 0.0
    macroturbulence: float = 0.0

    @property
    def total(self) -> float:
        """Full width at half maximum of a Gaussian with the variance of all parts [km/s]."""
        sigma2 = (ROTATION_TO_SIGMA * self.vsini) ** 2 + (0.5 * self.macroturbulence) ** 2
        return float(np.sqrt(self.fwhm**2 + FWHM_PER_SIGMA**2 * sigma2))

    def transform(self, n: int, step: float) -> np.ndarray:
        """Fourier transform on a periodic grid of n velocities, for `numpy.fft.rfft`: real, 1 at frequency 0.

        Parameters
        ----------
        n : int
        step : float
            [km/s].

        Returns
        -------
        ndarray, shape (n // 2 + 1,)
        """
        frequency = np.fft.rfftfreq(n, step)
        result = np.exp(-2.0 * (np.pi * frequency * self.fwhm / FWHM_PER_SIGMA) ** 2)
        if self.vsini > 0.0:
            result = result * _rotation_transform(2.0 * np.pi * frequency * self.vsini)
        if self.macroturbulence > 0.0:
            light, widths = _rings(self.macroturbulence)
            result = result * (light @ np.exp(-((np.pi * frequency * widths[:, None]) ** 2)))
        return result


def _rings(dispersion: float, n_rings: int = 16) -> tuple[np.ndarray, np.ndarray]:
    """Light and Gaussian dispersions of rings of equal area, along the radius and along the tangent."""
    mu2 = (np.arange(n_rings) + 0.5) / n_rings
    light = 1.0 - LIMB_DARKENING + LIMB_DARKENING * np.sqrt(mu2)
    light *= 0.5 / light.sum()
    return np.concatenate([light, light]), dispersion * np.sqrt(np.concatenate([mu2, 1.0 - mu2]))


def _rotation_transform(u: np.ndarray) -> np.ndarray:
    """Fourier transform of `rotation` at u = 2 pi frequency v sin i: Bessel and trigonometric parts of its two terms."""
    from scipy.special import j1

    small = np.maximum(u, 1e-3)
    disc = 2.0 * j1(small) / small  # of 2/pi sqrt(1 - x^2)
    parabola = 3.0 * (np.sin(small) - small * np.cos(small)) / small**3  # of 3/4 (1 - x^2)
    weight = (1.0 - LIMB_DARKENING) / (1.0 - LIMB_DARKENING / 3.0)
    return np.where(u < 1e-3, 1.0, weight * disc + (1.0 - weight) * parabola)


def broaden(flux, step: float, kernel: Kernel) -> np.ndarray:
    """Convolve a relative flux on equal steps of ln(wavelength); beyond both ends it continues as 1.

    Parameters
    ----------
    flux : ndarray, shape (n,)
    step : float
        [km/s].
    kernel : Kernel
    """
    from scipy.fft import next_fast_len

    depth = 1.0 - np.asarray(flux, float)
    n = next_fast_len(depth.size + int(200.0 / step), real=True)
    return 1.0 - np.fft.irfft(np.fft.rfft(depth, n) * kernel.transform(n, step), n)[: depth.size]
