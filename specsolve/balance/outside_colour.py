"""Teff from colours by published polynomials, as a function of the star's metallicity.

With X the dereddened colour, theta = 5040 K / Teff = a0 + a1 X + a2 X^2 + a3 X [Fe/H] + a4 [Fe/H] + a5 [Fe/H]^2:

- "dwarfs" (dwarfs and subgiants): Casagrande et al. 2010, A&A 512, A54, table 4;
- "giants": Gonzalez Hernandez & Bonifacio 2009, A&A 497, 497, table 5.

Coefficients are from memory; those of the dwarfs give the Sun's 5777 K at its colours. Outside the ranges below an error
is raised. The ranges of the giants are narrower than those of the fit (common practice, no source).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from specsolve.errors import InputError

DWARFS, GIANTS = "dwarfs", "giants"
SCALES = (DWARFS, GIANTS)
SOURCES = {DWARFS: "Casagrande et al. 2010", GIANTS: "Gonzalez Hernandez & Bonifacio 2009"}
FEH_RANGE = {DWARFS: (-5.0, 0.4), GIANTS: (-4.0, 0.5)}
# E(colour) / E(B-V) for R_V = 3.1 and the extinction curve of Cardelli, Clayton & Mathis 1989, ApJ 345, 245, table 3
# (A_J, A_H, A_K / A_V = 0.282, 0.190, 0.114).
REDDENING_RATIO = {"b_v": 1.0, "v_j": 2.23, "v_h": 2.51, "v_ks": 2.75, "j_ks": 0.52}
REFERENCE_FEH = 0.0  # where the weights of several colours and the errors are computed


@dataclass(frozen=True, kw_only=True)
class ColourRelation:
    """One polynomial.

    Attributes
    ----------
    coefficients : tuple of 6 floats
    range : (float, float)
        Of the dereddened colour.
    sigma : float
        Scatter of the calibrating stars [K] (giants: rounded up).
    """

    coefficients: tuple[float, float, float, float, float, float]
    range: tuple[float, float]
    sigma: float

    def teff(self, colour: float, feh: float) -> tuple[float, float, float]:
        """Teff [K] and its derivatives by colour and [Fe/H]."""
        a0, a1, a2, a3, a4, a5 = self.coefficients
        theta = a0 + a1 * colour + a2 * colour**2 + a3 * colour * feh + a4 * feh + a5 * feh**2
        teff = 5040.0 / theta
        scale = -teff / theta
        return teff, scale * (a1 + 2.0 * a2 * colour + a3 * feh), scale * (a3 * colour + a4 + 2.0 * a5 * feh)


RELATIONS: Mapping[str, Mapping[str, ColourRelation]] = {
    DWARFS: {
        "b_v": ColourRelation(
            coefficients=(0.5665, 0.4809, -0.0060, -0.0613, -0.0042, -0.0055), range=(0.18, 1.29), sigma=73.0
        ),
        "v_j": ColourRelation(
            coefficients=(0.4669, 0.3849, -0.0350, -0.0140, 0.0225, 0.0011), range=(0.61, 2.44), sigma=41.0
        ),
        "v_h": ColourRelation(
            coefficients=(0.5251, 0.2553, -0.0119, -0.0187, 0.0410, 0.0025), range=(0.67, 3.01), sigma=38.0
        ),
        "v_ks": ColourRelation(
            coefficients=(0.5057, 0.2600, -0.0146, -0.0131, 0.0288, 0.0016), range=(0.78, 3.15), sigma=25.0
        ),
        "j_ks": ColourRelation(
            coefficients=(0.6393, 0.6104, 0.0920, -0.0330, 0.0291, 0.0020), range=(0.07, 0.80), sigma=132.0
        ),
    },
    GIANTS: {
        "b_v": ColourRelation(
            coefficients=(0.4967, 0.7260, -0.1563, 0.0255, -0.0585, -0.0061), range=(0.60, 1.35), sigma=75.0
        ),
        "v_j": ColourRelation(
            coefficients=(0.4629, 0.4124, -0.0417, -0.0012, 0.0094, 0.0013), range=(1.20, 2.60), sigma=60.0
        ),
        "v_ks": ColourRelation(
            coefficients=(0.5293, 0.2489, -0.0119, -0.0042, 0.0135, 0.0010), range=(1.60, 3.60), sigma=40.0
        ),
    },
}


@dataclass(frozen=True, kw_only=True)
class ColourTemperature:
    """Teff as a function of theta from one or several colours, weighted by their errors.

    Attributes
    ----------
    scale : str
        "dwarfs" or "giants".
    colours : tuple of (name, value, error)
        As observed [mag].
    reddening : float
        E(B-V) [mag].

    Raises
    ------
    InputError
        No such relation, or a colour outside its range.

    Examples
    --------
    >>> sun = ColourTemperature(scale="dwarfs", colours=(("v_ks", 1.54, 0.02),))
    >>> round(sun((5772.0, 4.4, 0.0, 1.0))[0], -1)
    5780.0
    """

    scale: str
    colours: tuple[tuple[str, float, float], ...]
    reddening: float = 0.0

    def __post_init__(self) -> None:
        if self.scale not in SCALES:
            raise InputError(f"colour_scale '{self.scale}' is not one of {', '.join(SCALES)}")
        for name, value, _ in self.colours:
            relation = RELATIONS[self.scale].get(name)
            if relation is None:
                raise InputError(
                    f"no relation of {self.scale} for colour_{name}; there are "
                    + ", ".join(f"colour_{known}" for known in RELATIONS[self.scale])
                )
            free = value - REDDENING_RATIO[name] * self.reddening
            low, high = relation.range
            if not low <= free <= high:
                raise InputError(
                    f"colour_{name} = {free:.3f} (dereddened) lies outside the range {low:g} to {high:g} of "
                    f"{SOURCES[self.scale]} for {self.scale}"
                )

    def _each(self, feh: float) -> np.ndarray:
        rows = []
        for name, value, _ in self.colours:
            relation = RELATIONS[self.scale][name]
            rows.append(relation.teff(value - REDDENING_RATIO[name] * self.reddening, feh))
        return np.array(rows)

    @cached_property
    def _combined(self) -> tuple[np.ndarray, float]:
        """Weights of the colours (the reddening they share not counted), and the error of the mean [K]."""
        slope = self._each(REFERENCE_FEH)[:, 1]
        errors = np.array([error for _, _, error in self.colours])
        scatter = np.array([RELATIONS[self.scale][name].sigma for name, _, _ in self.colours])
        variance = (slope * errors) ** 2 + scatter**2
        weights = (1.0 / variance) / (1.0 / variance).sum()
        return weights, math.sqrt(float(1.0 / (1.0 / variance).sum()))

    def __call__(self, theta) -> tuple[float, np.ndarray]:
        """Teff expected at theta and its gradient, shape (4,)."""
        feh = float(theta[2])
        weights, _ = self._combined
        each = self._each(feh)
        return float(weights @ each[:, 0]), np.array([0.0, 0.0, float(weights @ each[:, 2]), 0.0])

    def check(self, theta) -> None:
        """Raise InputError if the solution's metallicity is outside the relation's range; the search may look there."""
        low, high = FEH_RANGE[self.scale]
        if not low <= float(theta[2]) <= high:
            raise InputError(
                f"{SOURCES[self.scale]} holds from [Fe/H] {low:g} to {high:g}, not at {theta[2]:.2f}: give teff instead"
            )

    @property
    def sigma(self) -> float:
        """Error at fixed metallicity and reddening [K]."""
        return self._combined[1]

    @property
    def d_reddening(self) -> float:
        """Change of Teff with E(B-V) [K/mag] at the reference metallicity."""
        ratios = np.array([REDDENING_RATIO[name] for name, _, _ in self.colours])
        return float(self._combined[0] @ (-ratios * self._each(REFERENCE_FEH)[:, 1]))

    @property
    def source(self) -> str:
        """What the temperature rests on."""
        shown = ", ".join(f"{name.replace('_', '-')} {value:g}" for name, value, _ in self.colours)
        return f"{shown}, E(B-V) {self.reddening:g}; {SOURCES[self.scale]} ({self.scale})"
