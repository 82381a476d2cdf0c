"""Options that several commands share."""

from __future__ import annotations

from typing import Any

import click


def input_options(function: Any) -> Any:
    """Options that say how to read the tables; ``solve`` and ``check`` share them."""
    for option in (
        click.option("--fix", "fixed", multiple=True, metavar="NAME=VALUE", help="Hold teff, logg, feh or vmic."),
        click.option(
            "--cut",
            "cuts",
            multiple=True,
            metavar="NAME=LOW:HIGH",
            help="Lines kept: reduced_width (predicted), excitation [eV], wavelength [Angstrom].",
        ),
        click.option("--unit", "units", multiple=True, metavar="OURS=UNIT", help="Unit of a column without one."),
        click.option("--ion", "ions", multiple=True, metavar='THEIRS="Fe I"', help="Another spelling of an ion."),
        click.option("--column", "columns", multiple=True, metavar="OURS=THEIRS", help="Another column heading."),
        click.option(
            "--treatment",
            type=click.Choice(["lte", "nlte", "both"]),
            help="Line formation; both gives a row each and the differences. Default: nlte if the grid has it.",
        ),
        click.option("--grid", "grid_path", metavar="DIR", help="A response grid of your own."),
    ):
        function = option(function)
    return function


def delivery_options(function: Any) -> Any:
    """Options that say where the result goes."""
    for option in (
        click.option(
            "--sheets/--overview", default=None, help="A sheet a star, or a line a star; default sheets up to three."
        ),
        click.option("--plot-format", type=click.Choice(["pdf", "png", "svg"]), default="pdf", show_default=True),
        click.option("--plots", metavar="DIR", help="Draw one page a star into this folder."),
        click.option(
            "--output", metavar="FILE", help="Write FILE.ecsv and its lines, candidates, decisions; - for stdout."
        ),
    ):
        function = option(function)
    return function
