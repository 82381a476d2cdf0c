"""Turn the texts of options into values; every misunderstanding is a usage error that shows a right example."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping

from specsolve.errors import UsageError
from specsolve.schema import INPUT, OUTSIDE, PARAMETERS

NAMES = tuple(name for name, _, _ in PARAMETERS)
LIMITS = {"teff": (2000.0, 12000.0), "logg": (-1.0, 6.5), "feh": (-6.0, 2.0), "vmic": (0.0, 10.0)}
CUTS = {"reduced_width": "reduced_width_range", "excitation": "excitation_range", "wavelength": "wavelength_range"}


def pairs(texts: Iterable[str], option: str, example: str) -> dict[str, str]:
    """NAME=VALUE texts as a dict.

    Examples
    --------
    >>> pairs(["ion=species"], "--column", "ion=species")
    {'ion': 'species'}
    """
    found: dict[str, str] = {}
    for text in texts:
        name, sign, value = text.partition("=")
        name, value = name.strip(), value.strip().strip("\"'")
        if not sign or not name or not value:
            raise UsageError(f"{option} {text!r}: write it as {option} {example}")
        if name in found:
            raise UsageError(f"{option} gives {name} twice")
        found[name] = value
    return found


def numbers(texts: Iterable[str], option: str) -> dict[str, float]:
    """Parameter values such as ``logg=4.44``; commas may join several.

    Examples
    --------
    >>> numbers(["teff=5772,logg=4.44"], "--fix")
    {'teff': 5772.0, 'logg': 4.44}
    """
    split = [part for text in texts for part in text.split(",")]
    return {name: _checked(name, value, option) for name, value in pairs(split, option, "logg=4.44").items()}


def cuts(texts: Iterable[str]) -> dict[str, tuple[float, float]]:
    """Line cuts such as ``reduced_width=-6:-4.8`` as options of a solve.

    Examples
    --------
    >>> cuts(["excitation=0:5"])
    {'excitation_range': (0.0, 5.0)}
    """
    found = {}
    for name, text in pairs(texts, "--cut", "reduced_width=-6.0:-4.8").items():
        if name not in CUTS:
            raise UsageError(f"--cut {name}: can be {', '.join(CUTS)}")
        low, sign, high = text.partition(":")
        limits = (_number(low, "--cut", name), _number(high, "--cut", name)) if sign else (math.nan, math.nan)
        if not limits[0] < limits[1]:
            raise UsageError(f"--cut {name}={text}: give lower and upper limit, as --cut reduced_width=-6.0:-4.8")
        found[CUTS[name]] = limits
    return found


def interval(text: str, option: str, example: str) -> tuple[float, float]:
    """A range such as ``-100:300``.

    Examples
    --------
    >>> interval("-100:300", "--velocity-range", "-100:300")
    (-100.0, 300.0)
    """
    low, sign, high = text.partition(":")
    limits = (_number(low, option, "range"), _number(high, option, "range")) if sign else (math.nan, math.nan)
    if not limits[0] < limits[1]:
        raise UsageError(f"{option} {text}: give lower and upper limit, as {option} {example}")
    return limits


def column_names(texts: Iterable[str]) -> dict[str, str]:
    """``--column OURS=THEIRS``; unknown names of ours are refused."""
    found = pairs(texts, "--column", "equivalent_width=EW")
    ours = [column.name for column in (*INPUT, *OUTSIDE)]
    for name in found:
        if name not in ours:
            raise UsageError(f"--column {name}={found[name]}: specsolve has no column {name}; it has {', '.join(ours)}")
    return found


def ion_names(texts: Iterable[str]) -> dict[str, str]:
    """``--ion THEIRS="Fe I"``: a spelling in the table, and the ion it stands for.

    Examples
    --------
    >>> ion_names(["neutral=Fe I"])
    {'neutral': 'Fe I'}
    """
    found = pairs(texts, "--ion", 'FeI="Fe I"')
    for theirs, ours in found.items():
        if ours not in ("Fe I", "Fe II"):
            raise UsageError(f'--ion {theirs}={ours}: the ion can be "Fe I" or "Fe II"')
    return found


def unit_names(texts: Iterable[str]) -> dict[str, str]:
    """``--unit equivalent_width=mAngstrom``: the unit of a column that does not state it."""
    found = pairs(texts, "--unit", "equivalent_width=mAngstrom")
    from astropy.units import Unit

    known = {column.name: column.unit for column in (*INPUT, *OUTSIDE) if column.unit}
    for name, text in found.items():
        if name not in known:
            raise UsageError(f"--unit {name}={text}: the columns with a unit are {', '.join(known)}")
        try:
            Unit(text)
        except ValueError:
            raise UsageError(f"--unit {name}={text}: not a unit; for example --unit {name}={known[name]}") from None
    return found


def disjoint(fixed: Mapping[str, float], known: Mapping[str, tuple[float, float]]) -> None:
    """A parameter is fixed or known with an error, not both."""
    for name in fixed:
        if name in known:
            raise UsageError(f"--fix and --prior both give {name}")


def check_parameter(name: str, value: float, option: str) -> None:
    """Refuse what is no parameter, or a value that no star has."""
    if name not in NAMES:
        raise UsageError(f"{option} {name}={value:g}: the parameters are {', '.join(NAMES)}")
    low, high = LIMITS[name]
    if not low <= value <= high:
        raise UsageError(f"{option} {name}={value:g}: {name} must lie between {low:g} and {high:g}")


def _checked(name: str, text: str, option: str) -> float:
    if name not in NAMES:
        raise UsageError(f"{option} {name}={text}: the parameters are {', '.join(NAMES)}")
    value = _number(text, option, name)
    check_parameter(name, value, option)
    return value


def number(text: str, option: str, name: str) -> float:
    """A finite number."""
    return _number(text, option, name)


def _number(text: str, option: str, name: str) -> float:
    try:
        value = float(text)
    except ValueError:
        raise UsageError(f"{option} {name}={text}: {text!r} is not a number") from None
    if not math.isfinite(value):
        raise UsageError(f"{option} {name}={text}: {text!r} is not a finite number")
    return value
