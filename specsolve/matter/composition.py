"""Chemical composition of an atmosphere: solar mixture, metallicity, and the law for the alpha elements.

Solar photospheric abundances: Asplund, Amarsi & Grevesse (2021, A&A 653, A141); elements without a photospheric value
are absent and contribute nothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from specsolve.constants import ATOMIC_MASS_G

# The elements of the equation of state, in order of atomic number.
ELEMENTS = ("H", "He", "C", "N", "O", "Ne", "Na", "Mg", "Al", "Si", "S", "K", "Ca", "Ti", "Cr", "Mn", "Fe", "Ni")
ALPHA_ELEMENTS = ("O", "Ne", "Mg", "Si", "S", "Ca", "Ti")

# Standard atomic weights [u], IUPAC 2021, abridged (Prohaska et al. 2022, Pure Appl. Chem. 94, 573).
ATOMIC_WEIGHTS = {
    "H": 1.008, "He": 4.0026, "Li": 6.94, "Be": 9.0122, "B": 10.81, "C": 12.011, "N": 14.007, "O": 15.999,
    "F": 18.998, "Ne": 20.18, "Na": 22.99, "Mg": 24.305, "Al": 26.982, "Si": 28.085, "P": 30.974, "S": 32.06,
    "Cl": 35.45, "Ar": 39.948, "K": 39.098, "Ca": 40.078, "Sc": 44.956, "Ti": 47.867, "V": 50.941, "Cr": 51.996,
    "Mn": 54.938, "Fe": 55.845, "Co": 58.933, "Ni": 58.693, "Cu": 63.546, "Zn": 65.38, "Ga": 69.723, "Ge": 72.63,
    "As": 74.922, "Se": 78.971, "Br": 79.904, "Kr": 83.798, "Rb": 85.468, "Sr": 87.62, "Y": 88.906, "Zr": 91.224,
    "Nb": 92.906, "Mo": 95.95, "Ru": 101.07, "Rh": 102.91, "Pd": 106.42, "Ag": 107.87, "Cd": 112.41, "In": 114.82,
    "Sn": 118.71, "Sb": 121.76, "Te": 127.6, "Xe": 131.29, "Cs": 132.91, "Ba": 137.33, "La": 138.91, "Ce": 140.12,
    "Pr": 140.91, "Nd": 144.24, "Sm": 150.36, "Eu": 151.96, "Gd": 157.25, "Tb": 158.93, "Dy": 162.5, "Ho": 164.93,
    "Er": 167.26, "Tm": 168.93, "Yb": 173.04, "Lu": 174.97, "Hf": 178.49, "Ta": 180.95, "W": 183.84, "Re": 186.21,
    "Os": 190.23, "Ir": 192.22, "Pt": 195.08, "Au": 196.97, "Hg": 200.59, "Tl": 204.38, "Pb": 207.2, "Bi": 208.98,
    "Th": 232.04, "U": 238.03,
}  # fmt: skip

# log10(N / N_H) + 12 of the solar photosphere, Asplund, Amarsi & Grevesse 2021.
SOLAR_ABUNDANCES = {
    "H": 12.00, "He": 10.914, "Li": 0.96, "Be": 1.38, "B": 2.70, "C": 8.46, "N": 7.83, "O": 8.69, "F": 4.40,
    "Ne": 8.06, "Na": 6.22, "Mg": 7.55, "Al": 6.43, "Si": 7.51, "P": 5.41, "S": 7.12, "Cl": 5.31, "Ar": 6.38,
    "K": 5.07, "Ca": 6.30, "Sc": 3.14, "Ti": 4.97, "V": 3.90, "Cr": 5.62, "Mn": 5.42, "Fe": 7.46, "Co": 4.94,
    "Ni": 6.20, "Cu": 4.18, "Zn": 4.56, "Ga": 3.02, "Ge": 3.62, "As": 2.30, "Se": 3.34, "Br": 2.54, "Kr": 3.12,
    "Rb": 2.32, "Sr": 2.83, "Y": 2.21, "Zr": 2.59, "Nb": 1.47, "Mo": 1.88, "Ru": 1.75, "Rh": 0.78, "Pd": 1.57,
    "Ag": 0.96, "Cd": 1.71, "In": 0.80, "Sn": 2.02, "Sb": 1.01, "Te": 2.18, "Xe": 2.22, "Cs": 1.08, "Ba": 2.27,
    "La": 1.11, "Ce": 1.58, "Pr": 0.75, "Nd": 1.42, "Sm": 0.95, "Eu": 0.52, "Gd": 1.08, "Tb": 0.31, "Dy": 1.10,
    "Ho": 0.48, "Er": 0.93, "Tm": 0.11, "Yb": 0.85, "Lu": 0.10, "Hf": 0.85, "Ta": -0.15, "W": 0.79, "Re": 0.26,
    "Os": 1.35, "Ir": 1.32, "Pt": 1.61, "Au": 0.91, "Hg": 1.17, "Tl": 0.92, "Pb": 1.95, "Bi": 0.65, "Th": 0.03,
    "U": -0.54,
}  # fmt: skip

# The law of [alpha/Fe]: two plateaus joined by a hyperbolic tangent, zero at solar metallicity. The plateau of 0.4 and
# a knee near [Fe/H] = -0.5 are common practice, no source; the width is wide enough for cubic interpolation at 0.5 dex.
ALPHA_PLATEAU = 0.4  # dex
ALPHA_KNEE = -0.5  # dex
ALPHA_WIDTH = 0.5  # dex


@dataclass(frozen=True, kw_only=True)
class Composition:
    """Numbers of atoms per hydrogen nucleus.

    Attributes
    ----------
    mh : float
        Metallicity [Fe/H] of the atmosphere [dex].
    alpha : float
        [alpha/Fe] [dex].
    abundances : ndarray, shape (n_elements,)
        Number of nuclei per hydrogen nucleus, in the order of `ELEMENTS`.
    """

    mh: float
    alpha: float
    abundances: np.ndarray

    @property
    def mass_per_hydrogen(self) -> float:
        """Mass per hydrogen nucleus [g]."""
        weights = np.array([ATOMIC_WEIGHTS[symbol] for symbol in ELEMENTS])
        return float(weights @ self.abundances) * ATOMIC_MASS_G


def alpha_law(mh: float) -> float:
    """[alpha/Fe] of an atmosphere as a smooth function of its metallicity.

    Parameters
    ----------
    mh : float
        [Fe/H] [dex].

    Returns
    -------
    float
        [alpha/Fe] [dex]: 0 at solar, 0.17 at -0.5, 0.35 at -1, 0.40 below -2, -0.05 at +0.5; all derivatives are
        continuous, because a kink would spoil interpolation between atmospheres.

    Examples
    --------
    >>> alpha_law(0.0), round(alpha_law(-3.0), 2)
    (0.0, 0.4)
    """
    at_solar = np.tanh(-ALPHA_KNEE / ALPHA_WIDTH)
    return float(ALPHA_PLATEAU * (at_solar - np.tanh((mh - ALPHA_KNEE) / ALPHA_WIDTH)) / (at_solar + 1.0))


def solar_abundance(symbol: str) -> float:
    """Solar photospheric abundance of an element.

    Parameters
    ----------
    symbol : str
        Chemical symbol.

    Returns
    -------
    float
        log10(N / N_H) + 12 [dex] (Asplund, Amarsi & Grevesse 2021); `-inf` for an element without a photospheric value.

    Examples
    --------
    >>> solar_abundance("Fe")
    7.46
    """
    return SOLAR_ABUNDANCES.get(symbol, -np.inf)


def number_abundance(symbol: str, mh: float, alpha: float | None = None) -> float:
    """Nuclei of an element per hydrogen nucleus.

    Parameters
    ----------
    symbol : str
        Chemical symbol, of any element.
    mh : float
        [Fe/H] [dex]; scales everything but H and He.
    alpha : float, optional
        [alpha/Fe] [dex], added for O, Ne, Mg, Si, S, Ca, Ti; `alpha_law(mh)` if not given.

    Returns
    -------
    float

    Examples
    --------
    >>> print(f"{number_abundance('Fe', -1.0):.2e}")
    2.88e-06
    """
    if symbol in ("H", "He"):
        return 10.0 ** (solar_abundance(symbol) - 12.0)
    enhancement = (alpha_law(mh) if alpha is None else alpha) if symbol in ALPHA_ELEMENTS else 0.0
    return 10.0 ** (solar_abundance(symbol) - 12.0 + mh + enhancement)


def composition_for(mh: float, alpha: float | None = None) -> Composition:
    """Composition of an atmosphere.

    Parameters
    ----------
    mh : float
        [Fe/H] [dex].
    alpha : float, optional
        [alpha/Fe] [dex]; `alpha_law(mh)` if not given.

    Returns
    -------
    Composition

    Examples
    --------
    >>> round(float(composition_for(0.0).mass_per_hydrogen) / ATOMIC_MASS_G, 3)
    1.355
    """
    alpha = alpha_law(mh) if alpha is None else float(alpha)
    abundances = np.array([number_abundance(symbol, mh, alpha) for symbol in ELEMENTS])
    return Composition(mh=float(mh), alpha=alpha, abundances=abundances)
