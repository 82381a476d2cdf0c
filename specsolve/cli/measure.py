"""``specsolve measure``: equivalent widths from spectra."""

from __future__ import annotations

import json
import sys
from collections.abc import Sequence
from concurrent.futures import Executor
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from specsolve.cli import parsing
from specsolve.cli.settings import Settings, common_options
from specsolve.errors import (
    EXIT_INTERRUPTED,
    EXIT_NO_INPUT,
    EXIT_SOLVED,
    EXIT_UNSOLVED,
    SpectrumError,
    UsageError,
)

if TYPE_CHECKING:
    from specsolve.measuring import Measured, Task

READ_COLUMNS = ("wavelength", "flux", "sigma", "mask", "order")
DEFAULT_LIST = "default"
STDOUT = "-"


@dataclass(frozen=True)
class Batch:
    """What came of the spectra.

    Attributes
    ----------
    measured : list of Measured
        Finished ones, in the order of the command line.
    interrupted : bool
    """

    measured: list[Measured]
    interrupted: bool = False

    @property
    def good(self) -> list[Measured]:
        """Those with widths."""
        return [one for one in self.measured if one.error is None]

    @property
    def failed(self) -> list[Measured]:
        """Those without."""
        return [one for one in self.measured if one.error is not None]


def spectrum_options(function: Any) -> Any:
    """Options that say how spectra are read and measured; ``measure`` and ``run`` share them."""
    for option in (
        click.option("--passes", type=click.IntRange(1, 6), default=3, show_default=True, help="Rounds of measuring."),
        click.option(
            "--guess", "guesses", multiple=True, metavar="NAME=VALUE", help="About what star: teff, logg, feh, vmic."
        ),
        click.option("--normalised/--not-normalised", default=None, help="Whether the continuum is divided out."),
        click.option("--orders", type=click.Choice(["separate", "merged"]), default="separate", show_default=True),
        click.option("--barycentric", is_flag=True, help="Report the correction to the barycentre, from the header."),
        click.option("--velocity-range", metavar="LOW:HIGH", help="Velocities searched [km/s]; default -600:600."),
        click.option("--velocity", type=float, metavar="KM/S", help="Take this velocity; nothing is searched."),
        click.option("--signal-to-noise", type=click.FloatRange(1.0), help="Per pixel; replaces errors of the file."),
        click.option("--resolving-power", type=click.FloatRange(1000.0), help="lambda / FWHM of the instrument."),
        click.option("--spectrum-column", "spectrum_columns", multiple=True, metavar="OURS=THEIRS",
                     help="Heading of wavelength, flux, sigma, mask or order in a table."),
        click.option("--wavelength-unit", metavar="UNIT", help="For example nm, micron, log10(Angstrom)."),
        click.option("--medium", type=click.Choice(["air", "vacuum"]), help="Of the wavelengths, if no header tells."),
        click.option("--name", "names", multiple=True, metavar="STAR", help="Names of the stars, one a spectrum."),
        click.option("--lines", "list_path", metavar="LIST", help="Lines to measure; the packaged list by default."),
    ):  # fmt: skip
        function = option(function)
    return function


@click.command(
    epilog="Exit codes: 0 all spectra measured; 3 none could be; 4 at least one could not; 130 interrupted.",
)
@click.argument("spectra", nargs=-1, required=True, metavar="SPECTRUM...")
@spectrum_options
@click.option("--plot-format", type=click.Choice(["pdf", "png", "svg"]), default="pdf", show_default=True)
@click.option("--plots", metavar="DIR", help="Draw an overview and the lines, worst first, into this folder.")
@click.option("--treatment", type=click.Choice(["lte", "nlte"]), help="Line formation of the rough solves.")
@click.option("--grid", "grid_path", metavar="DIR", help="A response grid of your own, for the rough solves.")
@click.option("--workers", type=click.IntRange(1), default=1, show_default=True, help="Processes, for many spectra.")
@click.option("--output", metavar="EWS", help="Write EWS.ecsv (for solve) and EWS_spectra.ecsv; - for stdout.")
@common_options()
def measure(settings: Settings, spectra: tuple[str, ...], **chosen: Any) -> int:
    """Equivalent widths of a line list in one or more spectra; their table is read by solve.

    \b
    Examples:
      specsolve measure star.fits --output widths
      specsolve measure *.fits --lines my_lines.ecsv --output widths --plots figures --workers 4
      specsolve measure star.txt --medium vacuum --wavelength-unit nm --resolving-power 60000
      specsolve solve widths.ecsv
    """
    output, plots, plot_format = chosen.pop("output"), chosen.pop("plots"), chosen.pop("plot_format")
    if settings.json and output == STDOUT:
        raise UsageError("--json and --output - both want standard output")
    if output not in (None, STDOUT):
        from specsolve.report.tables import check_writable

        check_writable(output)
    workers = chosen.pop("workers")
    tasks = make_tasks(spectra, **chosen, pixels=plots is not None)
    batch = measure_all(settings, tasks, workers)
    provenance = provenance_of(spectra, chosen)
    deliver(settings, batch, provenance, output, plots, plot_format)
    return exit_code(settings, batch, len(tasks))


def make_tasks(
    spectra: Sequence[str],
    *,
    list_path: str | None,
    names: Sequence[str],
    medium: str | None,
    wavelength_unit: str | None,
    spectrum_columns: Sequence[str],
    resolving_power: float | None,
    signal_to_noise: float | None,
    velocity: float | None,
    velocity_range: str | None,
    barycentric: bool,
    orders: str,
    normalised: bool | None,
    guesses: Sequence[str],
    passes: int,
    grid_path: str | None,
    treatment: str | None,
    pixels: bool,
) -> list[Task]:
    """One task a spectrum; misunderstandings are usage errors."""
    if names and len(names) != len(spectra):
        raise UsageError(f"{len(names)} names for {len(spectra)} spectra: give --name once a spectrum")
    columns = parsing.pairs(spectrum_columns, "--spectrum-column", "flux=NORM")
    for ours in columns:
        if ours not in READ_COLUMNS:
            raise UsageError(f"--spectrum-column {ours}: can be {', '.join(READ_COLUMNS)}")
    if velocity is not None and velocity_range is not None:
        raise UsageError("--velocity and --velocity-range exclude each other")
    from specsolve.lines.reading import default_line_list, read_line_list
    from specsolve.measuring import Task
    from specsolve.spectrum.raw import ReadOptions
    from specsolve.spectrum.velocity import SEARCH_RANGE

    search = parsing.interval(velocity_range, "--velocity-range", "-100:300") if velocity_range else SEARCH_RANGE
    guess = star_guess(parsing.numbers(guesses, "--guess"))
    lines = default_line_list() if list_path in (None, DEFAULT_LIST) else read_line_list(list_path)
    return [
        Task(
            path=path,
            lines=lines,
            reading=ReadOptions(
                star=names[place] if names else None,
                medium=medium,
                unit=wavelength_unit,
                resolving_power=resolving_power,
                signal_to_noise=signal_to_noise,
                normalised=normalised,
                columns=columns,
            ),
            velocity=velocity,
            search=search,
            barycentric=barycentric,
            orders=orders,
            guess=guess,
            passes=passes,
            grid=grid_path,
            treatment=treatment,
            pixels=pixels,
        )
        for place, path in enumerate(spectra)
    ]


def star_guess(values: dict[str, float]) -> Any:
    """A `Guess` of ``--guess``; None if nothing was said. What is not said keeps its default."""
    if not values:
        return None
    from specsolve.spectrum.predict import Guess

    return Guess(**{("mh" if name == "feh" else name): value for name, value in values.items()})


def measure_all(settings: Settings, tasks: Sequence[Task], workers: int) -> Batch:
    """Measure all spectra; on Ctrl-C the finished ones are kept.

    Raises
    ------
    SpectrumError
        If none could be measured: the error of the first.
    """
    from specsolve.cli.progress import counting
    from specsolve.measuring import measure_stream

    done: dict[int, Measured] = {}
    interrupted = False
    executor = make_executor(workers if len(tasks) > 1 else 1)
    try:
        with counting("spectra", quiet=settings.verbosity < 0 or len(tasks) < 2) as progress:
            for place, one in measure_stream(tasks, executor):
                done[place] = one
                settings.detail(f"{one.star}: {'failed' if one.error else 'measured'}")
                if progress:
                    progress(len(done), len(tasks))
    except KeyboardInterrupt:
        interrupted = True
    finally:
        if executor is not None:
            executor.shutdown(wait=not interrupted, cancel_futures=True)
    batch = Batch(unique_names([done[place] for place in sorted(done)]), interrupted)
    if not interrupted and not batch.good:
        for one in batch.failed[1:]:
            settings.warn(f"specsolve: {one.error}")
        raise batch.failed[0].error or SpectrumError("no spectrum")
    for one in batch.failed:
        settings.warn(f"specsolve: {one.error}")
    return batch


def make_executor(workers: int) -> Executor | None:
    """Processes for many spectra; `None` for one."""
    if workers == 1:
        return None
    import multiprocessing
    from concurrent.futures import ProcessPoolExecutor

    return ProcessPoolExecutor(workers, mp_context=multiprocessing.get_context("spawn"))


def unique_names(measured: Sequence[Measured]) -> list[Measured]:
    """Give a star another name if an earlier spectrum has one of that name."""
    from dataclasses import replace

    taken: set[str] = set()
    found = []
    for one in measured:
        name, count = one.star, 2
        while name in taken:
            name = f"{one.star} ({Path(one.path).name}{'' if count == 2 else f' {count - 1}'})"
            count += 1
        taken.add(name)
        widths = one.measurements and replace(one.measurements, star=name)
        found.append(one if name == one.star else replace(one, star=name, measurements=widths))
    return found


def provenance_of(spectra: Sequence[str], chosen: dict[str, Any]) -> dict[str, Any]:
    """Files, options and versions behind the widths."""
    from importlib import metadata

    from specsolve.provenance import collect

    lists = [chosen["list_path"]] if chosen.get("list_path") else []
    options = {name: list(value) if isinstance(value, tuple) else value for name, value in chosen.items()}
    return collect(inputs=[*spectra, *lists], options=options, specutils=metadata.version("specutils"))


def deliver(
    settings: Settings,
    batch: Batch,
    provenance: dict[str, Any],
    output: str | None,
    plots: str | None,
    kind: str,
    *,
    told: bool = True,
) -> None:
    """Write tables and figures, print the summaries or JSON; `told` says which tables were written."""
    from specsolve.report import measured as report

    if output == STDOUT:
        report.tables_of(batch.measured, provenance)["measurements"].write(
            sys.stdout, format="ascii.ecsv", delimiter=","
        )
    elif settings.json:
        click.echo(json.dumps(report.to_json(batch.measured, provenance), indent=1, allow_nan=False))
    else:
        for one in batch.good:
            for line in report.summary(one):
                click.echo(line)
    if output not in (None, STDOUT) and batch.good:
        paths = report.write(batch.measured, output, provenance)
        if told:
            settings.say("wrote " + ", ".join(str(path) for path in paths))
    if plots is not None:
        from specsolve.report.spectrum_figures import save_pages

        pages = save_pages(batch.good, Path(plots), kind)
        settings.say(f"drew {len(pages)} files into {plots}")


def exit_code(settings: Settings, batch: Batch, n_tasks: int) -> int:
    """0 all measured, 4 some failed, 3 none, 130 interrupted."""
    if batch.interrupted:
        left = n_tasks - len(batch.measured)
        settings.warn(f"specsolve: interrupted; {len(batch.measured)} spectra are finished and kept, {left} are not")
        return EXIT_INTERRUPTED
    if not batch.good:
        return EXIT_NO_INPUT
    return EXIT_UNSOLVED if batch.failed else EXIT_SOLVED
