"""``specsolve run``: from spectra to parameters, as ``measure`` and ``solve`` one after the other."""

from __future__ import annotations

import contextlib
import io
import json
import tempfile
from pathlib import Path
from typing import Any

import click

from specsolve.cli.measure import STDOUT, deliver, make_tasks, measure_all, provenance_of, spectrum_options
from specsolve.cli.settings import Settings, common_options
from specsolve.cli.solve import solve
from specsolve.errors import EXIT_INTERRUPTED, EXIT_SOLVED, EXIT_UNSOLVED, UsageError

OF_THE_TABLE = {"columns", "ions", "units", "tables"}
"""Options of solve about headings and spellings: the table in between is our own."""
OF_EVERY_COMMAND = {"debug_", "verbose_", "quiet_", "json_", "help"}
WIDTHS_ENDING = "_widths"


def solve_options(function: Any) -> Any:
    """All options of solve, except those about the headings of its tables."""
    for option in reversed(solve.params):
        if option.name not in OF_THE_TABLE | OF_EVERY_COMMAND:
            function = _attached(option)(function)
    return function


def _attached(option: click.Parameter) -> Any:
    def decorate(function: Any) -> Any:
        function.__dict__.setdefault("__click_params__", []).append(option)
        return function

    return decorate


@click.command(
    epilog="Exit codes: 0 all solved; 3 no usable spectrum; 4 a spectrum not measured, or a star unsolved, tied or "
    "outside the grid.",
)
@click.argument("spectra", nargs=-1, required=True, metavar="SPECTRUM...")
@solve_options
@spectrum_options
@common_options()
def run(settings: Settings, spectra: tuple[str, ...], **chosen: Any) -> int:
    """Teff, log g, [Fe/H] and microturbulence from spectra: measure and solve at once, with the options of both.

    \b
    Examples:
      specsolve run star.fits
      specsolve run *.fits --output result --plots figures --workers 4
      specsolve run star.fits --lines my_lines.ecsv --fix logg=2.45

    With --output X the widths are kept in X_widths.ecsv, the spectra in X_widths_spectra.ecsv.
    """
    names = {option.name for option in solve.params} - OF_THE_TABLE - OF_EVERY_COMMAND
    for_solve = {name: chosen[name] for name in names}
    # the rough solves on the way only choose windows: LTE does
    shared = {name: for_solve[name] for name in ("grid_path", "treatment")}
    for_measure = {name: value for name, value in chosen.items() if name not in names} | shared
    output = for_solve["output"]
    if settings.json and output == STDOUT:
        raise UsageError("--json and --output - both want standard output")
    if output not in (None, STDOUT):
        from specsolve.report.tables import check_writable

        check_writable(output)
    tasks = make_tasks(spectra, **for_measure, pixels=for_solve["plots"] is not None)
    batch = measure_all(settings, tasks, for_solve["workers"])
    provenance = provenance_of(spectra, for_measure)
    with tempfile.TemporaryDirectory(prefix="specsolve_") as aside:
        kept = output not in (None, STDOUT)
        stem = Path(output).name.removesuffix(".ecsv") if kept else "spectra"
        widths = (Path(output).parent if kept else Path(aside)) / f"{stem}{WIDTHS_ENDING}.ecsv"
        spoken = io.StringIO()
        with contextlib.redirect_stdout(spoken):
            deliver(settings, batch, provenance, str(widths), for_solve["plots"], for_solve["plot_format"], told=kept)
        solved = io.StringIO()
        if settings.json:
            with contextlib.redirect_stdout(solved):
                code = _solve(widths, for_solve)
            click.echo(json.dumps({**json.loads(solved.getvalue()), **_spectra(spoken.getvalue())}, indent=1))
        else:
            settings.say(spoken.getvalue().rstrip())
            code = _solve(widths, for_solve)
    if batch.interrupted:
        return EXIT_INTERRUPTED
    return EXIT_UNSOLVED if code == EXIT_SOLVED and batch.failed else code


def _solve(widths: Path, options: dict[str, Any]) -> int:
    return int(click.get_current_context().invoke(solve, tables=(str(widths),), **options) or EXIT_SOLVED)


def _spectra(text: str) -> dict[str, Any]:
    """The spectra of the JSON that measuring printed."""
    return {"spectra": json.loads(text)["spectra"]}
