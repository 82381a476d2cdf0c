"""``specsolve``: the group of commands, and the one place where errors become lines and exit codes."""

from __future__ import annotations

import errno
import os
import signal
import sys
import traceback
from importlib import import_module
from typing import Any

import click

from specsolve import __version__
from specsolve.cli.settings import QUIET, VERBOSE, Settings
from specsolve.errors import EXIT_INTERRUPTED, EXIT_UNEXPECTED, EXIT_USAGE, SpecsolveError

COMMANDS = {
    "solve": ("specsolve.cli.solve", "Teff, log g, [Fe/H] and microturbulence from tables of equivalent widths."),
    "measure": ("specsolve.cli.measure", "Equivalent widths of a line list in spectra."),
    "run": ("specsolve.cli.run", "Measure spectra and solve their widths at once."),
    "crosscheck": ("specsolve.cli.crosscheck", "Why published values differ from mine."),
    "cluster": ("specsolve.cli.cluster", "Members of a cluster, ready for age fitting."),
    "rehearse": ("specsolve.cli.rehearse", "What an observation would give."),
    "check": ("specsolve.cli.check", "Dry run: what of a table would be used, and what is wrong with it."),
    "again": ("specsolve.cli.again", "Repeat a solve from its own output files."),
    "columns": ("specsolve.cli.columns", "Explain the columns of the tables read and written."),
    "grid": ("specsolve.cli.grid", "Build, check and describe response grids."),
    "correction": ("specsolve.cli.correction", "NLTE minus LTE abundance of lines."),
    "departures": ("specsolve.cli.departures", "Build and describe departures from LTE."),
    "atmosphere": ("specsolve.cli.atmosphere", "Build, show and import model atmospheres."),
}


# Before numpy is loaded: the matrices are small, threads only wait for each other. A value that is set already stays.
THREAD_VARIABLES = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS")


class LazyGroup(click.Group):
    """A group whose commands are imported when they are called."""

    def list_commands(self, context: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, context: click.Context, name: str) -> click.Command | None:
        if name not in COMMANDS:
            return None
        return getattr(import_module(COMMANDS[name][0]), name)

    def format_commands(self, context: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl([(name, words) for name, (_, words) in COMMANDS.items()])

    def resolve_command(self, context: click.Context, args: list[str]) -> tuple[Any, Any, list[str]]:
        try:
            return super().resolve_command(context, args)
        except click.UsageError as error:
            raise click.UsageError(f"{error.message} Commands: {', '.join(COMMANDS)}.", context) from error


@click.group(
    cls=LazyGroup,
    context_settings={"help_option_names": ["-h", "--help"]},
    epilog="Exit codes: 0 all solved; 1 unexpected; 2 usage; 3 no usable input; 4 at least one star or file "
    "unsolved, tied or outside the grid; 130 interrupted.",
)
@click.version_option(__version__, prog_name="specsolve")
@click.option("--debug", is_flag=True, help="Show the traceback of an error.")
@click.option("--verbose", "-v", is_flag=True, help="Say more on stderr.")
@click.option("--quiet", "-q", is_flag=True, help="Say only errors on stderr.")
@click.option("--json", "json_", is_flag=True, help="Print JSON on stdout.")
@click.pass_context
def group(context: click.Context, debug: bool, verbose: bool, quiet: bool, json_: bool) -> None:
    """Stellar parameters from equivalent widths of iron lines, on specsolve's own model atmospheres.

    \b
    Examples:
      specsolve solve widths.ecsv
      specsolve solve widths.ecsv --output result/stars --plots figures
      specsolve solve sun.ecsv --fix logg=4.44
      specsolve check widths.csv
    """
    if quiet and verbose:
        raise click.UsageError("--quiet and --verbose exclude each other")
    settings = context.ensure_object(Settings)
    settings.debug, settings.json = debug, json_
    settings.verbosity = QUIET if quiet else VERBOSE if verbose else 0


def run(arguments: list[str] | None = None) -> int:
    """Run the command line and return its exit code; all errors end here as one line on stderr."""
    debug = "--debug" in (sys.argv[1:] if arguments is None else arguments)
    try:
        code = group.main(args=arguments, prog_name="specsolve", standalone_mode=False, obj=Settings())
        return int(code or 0)
    except click.exceptions.Exit as leave:
        return int(leave.exit_code)
    except (click.exceptions.Abort, KeyboardInterrupt):
        return _fail("interrupted", EXIT_INTERRUPTED, debug)
    except click.exceptions.NoArgsIsHelpError as error:
        print(error.format_message(), file=sys.stderr)
        return EXIT_USAGE
    except click.UsageError as error:
        where = f" (see '{error.ctx.command_path} --help')" if error.ctx else ""
        return _fail(" ".join(error.format_message().split()) + where, EXIT_USAGE, debug)
    except click.ClickException as error:
        return _fail(error.format_message(), EXIT_USAGE, debug)
    except SpecsolveError as error:
        return _fail(str(error), error.exit_code, debug)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return EXIT_UNEXPECTED
    except OSError as error:
        return _fail(words_of_os_error(error), EXIT_UNEXPECTED, debug)
    except MemoryError:
        return _fail("out of memory", EXIT_UNEXPECTED, debug)
    except Exception as error:  # noqa: BLE001 - the last line of defence: one line, and the traceback with --debug
        return _fail(
            f"unexpected {type(error).__name__}: {error} (run with --debug for the traceback)", EXIT_UNEXPECTED, debug
        )


def words_of_os_error(error: OSError) -> str:
    """One line about a file that could not be read or written.

    Examples
    --------
    >>> words_of_os_error(OSError(28, "No space left on device", "out.ecsv"))
    'out.ecsv: the disk is full'
    """
    name = f"{error.filename}: " if error.filename else ""
    if error.errno == errno.ENOSPC:
        return f"{name}the disk is full"
    return f"{name}{(error.strerror or str(error)).lower()}"


def _fail(message: str, code: int, debug: bool) -> int:
    if debug:
        traceback.print_exc()
    print("specsolve: " + " ".join(message.split()), file=sys.stderr)
    return code


def _interrupt(number: int, frame: Any) -> None:
    raise KeyboardInterrupt


def main() -> None:
    """Entry point of the ``specsolve`` script."""
    for name in THREAD_VARIABLES:
        os.environ.setdefault(name, "1")
    signal.signal(signal.SIGTERM, _interrupt)
    sys.exit(run())
