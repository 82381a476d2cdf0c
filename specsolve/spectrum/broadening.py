"""What broadens all lines of a spectrum alike: the instrument, rotation, macroturbulence.

Velocities in km/s. Every profile has unit area; on a grid of equal velocity steps a convolution is a product of Fourier
transforms. Rotation: Gray 2008, The Observation and Analysis of Stellar Photospheres, eq. 18.14, with linear limb
darkening; macroturbulence: Gaussian, or radial-tangential with equal parts (Gray 2008, ch. 17) averaged over the disc.
"""

from __future__ import annotations

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


def radial_tangential(velocity, dispersion: float, n_rings: int = 16) -> np.ndarray:
    """Radial-tangential macroturbulence of unit area, equal parts, averaged over the disc with limb darkening.

    The velocity field is Gaussian exp(-(v / dispersion)^2) along the radius and along the tangent; Gray 2008, ch. 17.
    """
    mu2 = (np.arange(n_rings) + 0.5) / n_rings  # equal areas of the disc
    mu = np.sqrt(mu2)
    light = 1.0 - LIMB_DARKENING + LIMB_DARKENING * mu
    light /= light.sum()
    result = np.zeros(np.shape(velocity))
    for width in (dispersion * mu, dispersion * np.sqrt(1.0 - mu2)):
        for part, w in zip(light, width, strict=True):
            result += 0.5 * part * gaussian(velocity, FWHM_PER_SIGMA * w / np.sqrt(2.0))
    return result


def transform(n: int, step: float, *, fwhm: float = 0.0, vsini: float = 0.0, macroturbulence: float = 0.0):
    """Fourier transform of the common broadening on a periodic grid of n velocities, for `numpy.fft.rfft`.

    Parameters
    ----------
    n : int
    step : float
        [km/s].
    fwhm : float
        Of a Gaussian: the instrument, and a Gaussian macroturbulence in quadrature [km/s].
    vsini : float
        [km/s]; 0 for none.
    macroturbulence : float
        Radial-tangential dispersion [km/s]; 0 for none.

    Returns
    -------
    ndarray, shape (n // 2 + 1,)
        Real, 1 at frequency 0.
    """
    frequency = np.fft.rfftfreq(n, step)
    result = np.exp(-2.0 * (np.pi * frequency * fwhm / FWHM_PER_SIGMA) ** 2)
    if vsini > 0.0:
        result = result * _rotation_transform(2.0 * np.pi * frequency * vsini)
    if macroturbulence > 0.0:
        velocity = np.fft.fftfreq(n, 1.0 / n) * step
        result = result * np.fft.rfft(radial_tangential(velocity, macroturbulence) * step).real
    return result


def _rotation_transform(u: np.ndarray) -> np.ndarray:
    """Fourier transform of `rotation` at u = 2 pi frequency v sin i: Bessel and trigonometric parts of its two terms."""
    from scipy.special import j1

    small = np.maximum(u, 1e-3)
    disc = 2.0 * j1(small) / small  # of 2/pi sqrt(1 - x^2)
    parabola = 3.0 * (np.sin(small) - small * np.cos(small)) / small**3  # of 3/4 (1 - x^2)
    weight = (1.0 - LIMB_DARKENING) / (1.0 - LIMB_DARKENING / 3.0)
    return np.where(u < 1e-3, 1.0, weight * disc + (1.0 - weight) * parabola)


def broaden(flux, step: float, **broadening: float) -> np.ndarray:
    """Convolve a relative flux on equal steps of ln(wavelength); beyond both ends it continues as 1.

    Parameters
    ----------
    flux : ndarray, shape (n,)
    step : float
        [km/s].
    **broadening
        As in `transform`.
    """
    from scipy.fft import next_fast_len

    depth = 1.0 - np.asarray(flux, float)
    n = next_fast_len(depth.size + int(200.0 / step), real=True)
    return 1.0 - np.fft.irfft(np.fft.rfft(depth, n) * transform(n, step, **broadening), n)[: depth.size]


def total_fwhm(fwhm: float, vsini: float = 0.0) -> float:
    """Full width at half maximum of a Gaussian that has the variance of Gaussian and rotation together [km/s]."""
    return float(np.hypot(fwhm, FWHM_PER_SIGMA * ROTATION_TO_SIGMA * vsini))
