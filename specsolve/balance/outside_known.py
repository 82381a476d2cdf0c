"""From what is given for a star beside its lines (numbers by name) to `Outside` terms.

The names are those of the per-star columns of an input table and of the options: `fix_teff`, `prior_teff` with
`prior_teff_error`, `parallax`, `numax`, `colour_v_ks`, ... (`specsolve columns outside`). Nothing is assumed: a quantity
without its error, or a magnitude without its reddening, is an error. A reddening shared by colour and parallax makes
the temperature and the gravity correlated, which their covariance holds.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from specsolve.errors import InputError

from .outside import Outside
from .outside_colour import REDDENING_RATIO, ColourTemperature
from .outside_gravity import EXTINCTION_RATIO, ParallaxGravity, SeismicGravity
from .solution import PARAMETER_NAMES

FIX, PRIOR = "fix_", "prior_"
COVARIANCE = "prior_covariance"
ALPHA = "alpha"
BANDS = tuple(EXTINCTION_RATIO)
COLOURS = tuple(REDDENING_RATIO)
SCALE = "colour_scale"

Known = Mapping[str, Any]


def outside_from_known(known: Known) -> tuple[Outside, ...]:
    """The `Outside` terms of one star.

    Parameters
    ----------
    known : mapping
        Values by name: floats, `colour_scale` a text, `prior_covariance` a (4, 4) array in the order teff, logg, feh,
        vmic whose rows without a prior are ignored. Units: K, dex, km/s, mas, solar masses, microhertz, mag.

    Raises
    ------
    InputError
        If something that is needed is missing, contradicts itself, or lies outside the range of a relation.

    Examples
    --------
    >>> [term.names for term in outside_from_known({"fix_logg": 4.44, "prior_teff": 5772.0, "prior_teff_error": 50.0})]
    [('logg',), ('teff',)]
    """
    found = [*_fixed(known), *_priors(known), *_measured(known)]
    if "numax" in known:
        gravity = SeismicGravity(numax=float(known["numax"]))
        sigma = gravity.sigma(_error(known, "numax"))
        found.append(
            Outside(names=("logg",), mean=(gravity,), covariance=np.array([[sigma**2]]), source=gravity.source)
        )
    return tuple(found)


def _fixed(known: Known) -> list[Outside]:
    values = {name: float(known[FIX + name]) for name in PARAMETER_NAMES if FIX + name in known}
    for name in values:
        if PRIOR + name in known:
            raise InputError(f"{name} is both fixed (fix_{name}) and given with an error (prior_{name})")
    return [Outside.fixed("fixed by the user", **values)] if values else []


def _priors(known: Known) -> list[Outside]:
    names = tuple(name for name in PARAMETER_NAMES if PRIOR + name in known)
    if not names:
        return []
    mean = tuple(float(known[PRIOR + name]) for name in names)
    if COVARIANCE in known:
        place = [PARAMETER_NAMES.index(name) for name in names]
        covariance = np.asarray(known[COVARIANCE], float)[np.ix_(place, place)]
        if not np.isfinite(covariance).all():
            raise InputError(f"prior_covariance is not finite for {', '.join(names)}")
        source = "given by the user with covariance"
    else:
        covariance = np.diag([_error(known, PRIOR + name) ** 2 for name in names])
        source = "given by the user"
    try:
        return [Outside(names=names, mean=mean, covariance=covariance, source=source)]
    except ValueError as error:
        raise InputError(str(error)) from error


def _measured(known: Known) -> list[Outside]:
    """Teff from colours and log g from a parallax, with the covariance that a common reddening gives them."""
    colour, gravity = _colour(known), _gravity(known)
    terms = [item for item in (colour, gravity) if item is not None]
    if not terms:
        return []
    covariance = np.diag([sigma**2 for _, _, sigma in terms])
    lever = np.array([relation.d_reddening for _, relation, _ in terms])
    if lever.any():
        covariance = covariance + np.outer(lever, lever) * _error(known, "reddening") ** 2
    return [
        Outside(
            names=tuple(name for name, _, _ in terms),
            mean=tuple(relation for _, relation, _ in terms),
            covariance=covariance,
            source="; ".join(relation.source for _, relation, _ in terms),
        )
    ]


def _colour(known: Known) -> tuple[str, ColourTemperature, float] | None:
    given = tuple(name for name in COLOURS if f"colour_{name}" in known)
    if not given:
        return None
    if SCALE not in known:
        raise InputError("a colour needs colour_scale: dwarfs (and subgiants) or giants")
    colours = tuple((name, float(known[f"colour_{name}"]), _error(known, f"colour_{name}")) for name in given)
    relation = ColourTemperature(scale=str(known[SCALE]), colours=colours, reddening=_reddening(known))
    return "teff", relation, relation.sigma


def _gravity(known: Known) -> tuple[str, ParallaxGravity, float] | None:
    if "parallax" not in known:
        return None
    bands = [band for band in BANDS if f"magnitude_{band}" in known]
    if len(bands) != 1:
        names = ", ".join(f"magnitude_{band}" for band in BANDS)
        raise InputError(f"a gravity from the parallax needs one of {names}; {len(bands)} are given")
    if "mass" not in known:
        raise InputError("a gravity from the parallax needs a mass")
    band = bands[0]
    relation = ParallaxGravity(
        parallax=float(known["parallax"]),
        magnitude=float(known[f"magnitude_{band}"]),
        band=band,
        mass=float(known["mass"]),
        reddening=0.0 if band == "bolometric" else _reddening(known),
    )
    sigma = relation.sigma(_error(known, "parallax"), _error(known, f"magnitude_{band}"), _error(known, "mass"))
    return "logg", relation, sigma


def _reddening(known: Known) -> float:
    if "reddening" not in known:
        raise InputError(
            "a magnitude or colour needs reddening, E(B-V) in mag, with reddening_error (0 and 0 for none)"
        )
    _error(known, "reddening")
    return float(known["reddening"])


def _error(known: Known, name: str) -> float:
    value = known.get(f"{name}_error")
    if value is None:
        raise InputError(f"{name} is given without {name}_error")
    zero_allowed = name == "reddening"
    if not (float(value) > 0.0 or (zero_allowed and float(value) == 0.0)):
        raise InputError(f"{name}_error = {value:g} must be positive")
    return float(value)
