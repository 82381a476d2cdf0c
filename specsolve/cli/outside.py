"""Options about what is known of the stars beside their lines: --fix, --prior, --measured, --outside, --alpha."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import click

from specsolve.cli import parsing
from specsolve.errors import InputError, UsageError
from specsolve.schema import MEASURED

if TYPE_CHECKING:
    from specsolve.balance.star import Star

PLUS_MINUS = ("+-", "±", ":")
MEASURABLE = tuple(name for name, _, _ in MEASURED)
SHOWN_NAMES = 5


def outside_options(function: Callable[..., Any]) -> Callable[..., Any]:
    """The options; their values arrive as `known`, `measured`, `colour_scale`, `outside`, `alpha`."""
    for option in (
        click.option(
            "--alpha", type=float, metavar="DEX", help="[alpha/Fe] of the stars instead of the atmospheres' law."
        ),
        click.option(
            "--outside", "outside", metavar="TABLE", help="What is known of each star, see specsolve columns outside."
        ),
        click.option(
            "--colour-scale", type=click.Choice(["dwarfs", "giants"]), help="Relation for colours given by --measured."
        ),
        click.option(
            "--measured",
            multiple=True,
            metavar="NAME=VALUE+-ERROR",
            help="parallax, mass, magnitude_v, reddening, numax, colour_v_ks, ...: gives log g or Teff.",
        ),
        click.option(
            "--prior",
            "--known",
            "known",
            multiple=True,
            metavar="NAME=VALUE+-ERROR",
            help="A parameter known from elsewhere, as teff=5800+-60.",
        ),
    ):
        function = option(function)
    return function


def values_with_errors(
    texts: Iterable[str], option: str, example: str, *, error_needed: bool = True
) -> dict[str, tuple]:
    """NAME=VALUE+-ERROR texts as numbers; the error is 0 where none is given and none needed.

    Examples
    --------
    >>> values_with_errors(["teff=5800+-60"], "--prior", "teff=5800+-60")
    {'teff': (5800.0, 60.0)}
    """
    found = {}
    split = [part for text in texts for part in text.split(",")]
    for name, text in parsing.pairs(split, option, example).items():
        parts = re.split("|".join(map(re.escape, PLUS_MINUS)), text)
        if len(parts) > 2 or (len(parts) == 1 and error_needed):
            raise UsageError(f"{option} {name}={text}: give value and error, as {option} {example}")
        found[name] = tuple(parsing.number(part.strip(), option, name) for part in parts)
        if len(parts) == 1:
            found[name] += (0.0,)
    return found


def priors(texts: Iterable[str]) -> dict[str, tuple[float, float]]:
    """Values of ``--prior``."""
    found = values_with_errors(texts, "--prior", "teff=5800+-60")
    for name, (value, error) in found.items():
        parsing.check_parameter(name, value, "--prior")
        if not error > 0.0:
            raise UsageError(f"--prior {name}={value:g}: the error must be positive; to hold a value use --fix")
    return found


def reference_parameters(texts: Iterable[str]) -> tuple[dict[str, float] | None, dict[str, float]]:
    """Values and errors of ``--reference-parameters``; None without any."""
    found = values_with_errors(
        texts, "--reference-parameters", "teff=5777+-10,logg=4.44+-0.01,feh=0", error_needed=False
    )
    for name, (value, _) in found.items():
        parsing.check_parameter(name, value, "--reference-parameters")
    errors = {name: error for name, (_, error) in found.items() if error > 0.0}
    return {name: value for name, (value, _) in found.items()} or None, errors


def measured_values(texts: Iterable[str]) -> dict[str, float]:
    """Values of ``--measured`` by name, each with ``name_error``."""
    found = {}
    for name, (value, error) in values_with_errors(texts, "--measured", "parallax=12.3+-0.1").items():
        if name not in MEASURABLE:
            raise UsageError(f"--measured {name}: can be {', '.join(MEASURABLE)}")
        found |= {name: value, f"{name}_error": error}
    return found


def known_of_all(request: Any) -> dict[str, Any]:
    """What the options say of every star, by the names of `specsolve.balance.outside_known`."""
    found: dict[str, Any] = {f"fix_{name}": value for name, value in request.fix.items()}
    for name, (value, error) in request.known.items():
        found |= {f"prior_{name}": value, f"prior_{name}_error": error}
    found |= request.measured
    if request.colour_scale is not None:
        found["colour_scale"] = request.colour_scale
    if request.alpha is not None:
        found["alpha"] = request.alpha
    return found


def with_outside(stars: Sequence[Star], path: str | None) -> list[Star]:
    """The stars with what a table of outside knowledge says of them; columns of their own go before it.

    Raises
    ------
    InputError
        If the table has a star that is not among these.
    """
    if path is None:
        return list(stars)
    from specsolve.outside_table import read_outside

    table = read_outside(path)
    return merged(stars, table, path)


def merged(stars: Sequence[Star], table: Mapping[str, Mapping[str, Any]], path: str) -> list[Star]:
    """As `with_outside`, from values at hand."""
    strange = set(table) - {star.name for star in stars} - {""}
    if strange:
        shown = ", ".join(sorted(strange)[:SHOWN_NAMES]) + (", ..." if len(strange) > SHOWN_NAMES else "")
        raise InputError(f"{path}: no star in the tables is called {shown}", path=path)
    everybody = table.get("", {})
    return [replace(star, known={**everybody, **table.get(star.name, {}), **star.known}) for star in stars]


def said(stars: Sequence[Star]) -> str:
    """One line on what the tables say of the stars beside their lines; empty if nothing."""
    counts: dict[str, int] = {}
    for star in stars:
        for name in star.known:
            if not name.endswith("_error"):
                counts[name] = counts.get(name, 0) + 1
    if not counts:
        return ""
    return "from elsewhere: " + ", ".join(f"{name} of {n} star{'s' if n != 1 else ''}" for name, n in counts.items())
