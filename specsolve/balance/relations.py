"""Published relations of microturbulence with temperature and gravity, used only to break ties."""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True)
class VmicRelation:
    """Expected microturbulence at (teff, logg).

    Attributes
    ----------
    vmic : float
        [km/s]
    sigma : float
        Scatter about the relation [km/s].
    source : str
    """

    vmic: float
    sigma: float
    source: str


DWARF_SIGMA = 0.20  # km/s
GIANT_SIGMA = 0.25  # km/s
DWARF_SOURCE = "Bruntt et al. 2012, MNRAS 423, 122 (from memory)"
GIANT_SOURCE = "Kirby et al. 2009, ApJ 705, 328 (from memory)"
# Ranges of use: narrower than the ranges of the fits (common practice, no source).
DWARF_TEFF_K = (5050.0, 6900.0)
DWARF_LOGG = (3.5, 4.7)
GIANT_TEFF_K = (4000.0, 5500.0)
GIANT_LOGG = (0.5, 3.3)


def vmic_relation(teff: float, logg: float) -> VmicRelation | None:
    """The relation that holds at (teff [K], logg), or None outside the range of both.

    Examples
    --------
    >>> round(vmic_relation(5772.0, 4.44).vmic, 2)
    0.97
    >>> vmic_relation(4500.0, 4.6) is None
    True
    """
    if DWARF_TEFF_K[0] <= teff <= DWARF_TEFF_K[1] and DWARF_LOGG[0] <= logg <= DWARF_LOGG[1]:
        x = teff - 5700.0
        vmic = 1.095 + 5.44e-4 * x + 2.53e-7 * x * x - 0.378 * (logg - 4.0)
        return VmicRelation(vmic, DWARF_SIGMA, DWARF_SOURCE)
    if GIANT_TEFF_K[0] <= teff <= GIANT_TEFF_K[1] and GIANT_LOGG[0] <= logg <= GIANT_LOGG[1]:
        return VmicRelation(2.13 - 0.23 * logg, GIANT_SIGMA, GIANT_SOURCE)
    return None


def minus_two_log_prior(vmic: float, variance: float, relation: VmicRelation) -> float:
    """-2 ln of the Gaussian of a relation, its width with the variance of the measured vmic [km2/s2] added."""
    total = relation.sigma**2 + variance
    return (vmic - relation.vmic) ** 2 / total + math.log(total)
