"""Surface gravity from a parallax or from the frequency of maximum power, as functions of the star's temperature.

With M the mass and L the luminosity, log g = log g_sun + log M + 4 log(Teff / Teff_sun) - log L (in solar units),

    log L = -0.4 (m - A + 5 + 5 log10(parallax / 1000 mas) + BC(Teff) - M_bol,sun),

(for example Nissen, Hog & Schuster 1997, ESA SP-402, 225, from memory), and for solar-like oscillations

    log g = log g_sun + log(nu_max / nu_max,sun) + 0.5 log(Teff / Teff_sun)

(Brown et al. 1991, ApJ 368, 599; Kjeldsen & Bedding 1995, A&A 293, 87).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from specsolve.errors import InputError

from .own_sun import SUN_LOGG, SUN_TEFF_K

LN10 = math.log(10.0)

# BC(V) as powers of log10 Teff: Flower 1996, ApJ 469, 355, coefficients as corrected by Torres 2010, AJ 140, 1158,
# table 1 (from memory; BC(V) of the Sun is -0.08 as he says), cooler and hotter than log Teff = 3.70. His absolute
# bolometric magnitude of the Sun on this scale is 4.73.
FLOWER_COOL = (-0.190537291496456e5, 0.155144866764412e5, -0.421278819301717e4, 0.381476328422343e3)
FLOWER_WARM = (
    -0.370510203809015e5,
    0.385672629965804e5,
    -0.150651486316025e5,
    0.261724637119416e4,
    -0.170623810323864e3,
)
FLOWER_JOIN = 3.70  # log10 Teff; the two differ by 0.02 mag there
FLOWER_BLEND = 0.02  # half width in log10 Teff of the smooth passage from one to the other, ours
FLOWER_RANGE = (3300.0, 7900.0)  # K
# BC(G) as powers of Teff - 5772 K, 4000 to 8000 K: Andrae et al. 2018, A&A 616, A8, table 4 (from memory); their solar
# value +0.06 belongs to M_bol,sun = 4.74.
ANDRAE = (6.000e-2, 6.731e-5, -6.647e-8, 2.859e-11, -7.197e-15)
ANDRAE_RANGE = (4000.0, 8000.0)  # K
SUN_MBOL = {"v": 4.73, "g": 4.74, "bolometric": 4.74}  # 4.74: IAU 2015 Resolution B2
BC_ERROR = {"v": 0.05, "g": 0.05, "bolometric": 0.0}  # mag: scatter with metallicity and gravity (common practice)
# A / E(B-V): V the usual 3.1; G 2.74 of Casagrande & VandenBerg 2018, MNRAS 479, L102 (from memory).
EXTINCTION_RATIO = {"v": 3.1, "g": 2.74, "bolometric": 0.0}
BC_SOURCE = {
    "v": "BC(V) of Flower 1996 as in Torres 2010",
    "g": "BC(G) of Andrae et al. 2018",
    "bolometric": "bolometric magnitude as given",
}
MAX_RELATIVE_PARALLAX_ERROR = 0.2  # beyond it the distance is far from Gaussian (common practice, no source)

SUN_NUMAX_UHZ = 3090.0  # Huber et al. 2011, ApJ 743, 143 (from memory)
SUN_NUMAX_ERROR_UHZ = 30.0
NUMAX_RELATION_ERROR = 0.01  # dex: tests on binaries and clusters agree to a few per cent (common practice, no source)
NUMAX_RANGE_UHZ = (1.0, 5000.0)
MASS_RANGE = (0.1, 10.0)  # solar masses


def bolometric_correction(band: str, teff: float) -> tuple[float, float]:
    """Bolometric correction [mag] and its derivative by Teff [mag/K].

    Parameters
    ----------
    band : str
        "v", "g" or "bolometric" (zero).
    teff : float
        [K].

    Raises
    ------
    InputError
        Outside the range of the polynomial.

    Examples
    --------
    >>> round(bolometric_correction("v", 5772.0)[0], 2)
    -0.08
    """
    if band == "bolometric":
        return 0.0, 0.0
    low, high = FLOWER_RANGE if band == "v" else ANDRAE_RANGE
    if not low <= teff <= high:
        raise InputError(f"{BC_SOURCE[band]} holds from {low:.0f} to {high:.0f} K, not at {teff:.0f} K")
    if band == "g":
        value, slope = _polynomial(ANDRAE, teff - SUN_TEFF_K)
        return value, slope
    x = math.log10(teff)
    t = min(max((x - FLOWER_JOIN) / (2.0 * FLOWER_BLEND) + 0.5, 0.0), 1.0)
    share, d_share = t * t * (3.0 - 2.0 * t), 6.0 * t * (1.0 - t) / (2.0 * FLOWER_BLEND)
    (cool, d_cool), (warm, d_warm) = _polynomial(FLOWER_COOL, x), _polynomial(FLOWER_WARM, x)
    value = cool + share * (warm - cool)
    return value, (d_cool + share * (d_warm - d_cool) + d_share * (warm - cool)) / (teff * LN10)


def _polynomial(coefficients: tuple[float, ...], x: float) -> tuple[float, float]:
    value = slope = 0.0
    for c in reversed(coefficients):
        slope = slope * x + value
        value = value * x + c
    return value, slope


@dataclass(frozen=True, kw_only=True)
class ParallaxGravity:
    """log g as a function of theta from parallax, magnitude and mass.

    Attributes
    ----------
    parallax : float
        [mas].
    magnitude : float
        Apparent, as observed.
    band : str
        "v", "g" or "bolometric".
    mass : float
        [solar masses].
    reddening : float
        E(B-V) [mag]; not for "bolometric".

    Examples
    --------
    >>> sun_at_10_pc = ParallaxGravity(parallax=100.0, magnitude=4.74, band="bolometric", mass=1.0)
    >>> round(sun_at_10_pc((5772.0, 4.4, 0.0, 1.0))[0], 3)
    4.438
    """

    parallax: float
    magnitude: float
    band: str
    mass: float
    reddening: float = 0.0

    def __post_init__(self) -> None:
        if not self.parallax > 0.0:
            raise InputError(f"parallax = {self.parallax:g} mas gives no distance")
        if not MASS_RANGE[0] <= self.mass <= MASS_RANGE[1]:
            raise InputError(f"mass = {self.mass:g} solar masses lies outside {MASS_RANGE[0]:g} to {MASS_RANGE[1]:g}")

    def __call__(self, theta) -> tuple[float, np.ndarray]:
        """log g expected at theta and its gradient, shape (4,)."""
        teff = float(theta[0])
        correction, slope = bolometric_correction(self.band, teff)
        absolute = (
            self.magnitude
            - EXTINCTION_RATIO[self.band] * self.reddening
            + 5.0
            + 5.0 * math.log10(self.parallax / 1000.0)
            + correction
        )
        value = (
            SUN_LOGG + math.log10(self.mass) + 4.0 * math.log10(teff / SUN_TEFF_K)
            + 0.4 * (absolute - SUN_MBOL[self.band])
        )  # fmt: skip
        return value, np.array([4.0 / (teff * LN10) + 0.4 * slope, 0.0, 0.0, 0.0])

    def sigma(self, parallax_error: float, magnitude_error: float, mass_error: float) -> float:
        """Error of log g at fixed Teff and reddening [dex], the bolometric correction's included.

        Raises
        ------
        InputError
            If the parallax error exceeds 20 %.
        """
        relative = parallax_error / self.parallax
        if relative > MAX_RELATIVE_PARALLAX_ERROR:
            raise InputError(
                f"the parallax error is {100 * relative:.0f} %: above {100 * MAX_RELATIVE_PARALLAX_ERROR:.0f} % the "
                "gravity is not Gaussian; give logg and its error instead"
            )
        return math.sqrt(
            (2.0 * relative / LN10) ** 2
            + (mass_error / (self.mass * LN10)) ** 2
            + (0.4 * magnitude_error) ** 2
            + (0.4 * BC_ERROR[self.band]) ** 2
        )

    @property
    def d_reddening(self) -> float:
        """Change of log g with E(B-V) [dex/mag] at fixed Teff."""
        return -0.4 * EXTINCTION_RATIO[self.band]

    @property
    def source(self) -> str:
        """What the gravity rests on."""
        reddening = f", E(B-V) {self.reddening:g}" if self.band != "bolometric" else ""
        return (
            f"parallax {self.parallax:g} mas, {self.band} {self.magnitude:g}{reddening}, mass {self.mass:g}; "
            f"{BC_SOURCE[self.band]}"
        )


@dataclass(frozen=True, kw_only=True)
class SeismicGravity:
    """log g as a function of theta from the frequency of maximum power.

    Attributes
    ----------
    numax : float
        [microhertz].

    Examples
    --------
    >>> round(SeismicGravity(numax=3090.0)((5772.0, 4.4, 0.0, 1.0))[0], 3)
    4.438
    """

    numax: float

    def __post_init__(self) -> None:
        if not NUMAX_RANGE_UHZ[0] <= self.numax <= NUMAX_RANGE_UHZ[1]:
            raise InputError(
                f"numax = {self.numax:g} uHz lies outside {NUMAX_RANGE_UHZ[0]:g} to {NUMAX_RANGE_UHZ[1]:g}"
            )

    def __call__(self, theta) -> tuple[float, np.ndarray]:
        """log g expected at theta and its gradient, shape (4,)."""
        teff = float(theta[0])
        value = SUN_LOGG + math.log10(self.numax / SUN_NUMAX_UHZ) + 0.5 * math.log10(teff / SUN_TEFF_K)
        return value, np.array([0.5 / (teff * LN10), 0.0, 0.0, 0.0])

    def sigma(self, numax_error: float) -> float:
        """Error of log g at fixed Teff [dex], those of the solar value and of the relation included."""
        return math.sqrt(
            (numax_error / (self.numax * LN10)) ** 2
            + (SUN_NUMAX_ERROR_UHZ / (SUN_NUMAX_UHZ * LN10)) ** 2
            + NUMAX_RELATION_ERROR**2
        )

    @property
    def source(self) -> str:
        """What the gravity rests on."""
        return f"numax {self.numax:g} uHz, scaling from the Sun at {SUN_NUMAX_UHZ:g} uHz"
