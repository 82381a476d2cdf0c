"""Options that every command has, and the two streams: data to stdout, words to stderr."""

from __future__ import annotations

import functools
import logging
import os
import sys
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import click

NOBODY_LISTENS = 0
QUIET, NORMAL, VERBOSE = -1, 0, 1


@dataclass
class Settings:
    """What the user wants to see.

    Attributes
    ----------
    verbosity : int
        -1 quiet, 0 normal, 1 verbose.
    json : bool
        Print JSON on stdout instead of the sheet.
    debug : bool
        Show tracebacks.
    """

    verbosity: int = NORMAL
    json: bool = False
    debug: bool = False

    def say(self, text: str) -> None:
        """One line to stderr, unless quiet."""
        if self.verbosity > QUIET:
            click.echo(text, err=True)

    def detail(self, text: str) -> None:
        """One line to stderr, if verbose."""
        if self.verbosity >= VERBOSE:
            click.echo(text, err=True)

    def warn(self, text: str) -> None:
        """One line to stderr, always."""
        click.echo(text, err=True)

    def start_logging(self) -> None:
        """Send the library's log to stderr at the wanted level."""
        level = {QUIET: logging.ERROR, NORMAL: logging.WARNING, VERBOSE: logging.INFO}[self.verbosity]
        logging.basicConfig(
            stream=sys.stderr, level=logging.DEBUG if self.debug else level, format="%(levelname)s %(message)s"
        )


def wants_colour(stream: Any) -> bool:
    """Whether to colour what goes to a stream: a terminal, and NO_COLOR not set (no-color.org)."""
    return not os.environ.get("NO_COLOR") and os.environ.get("TERM") != "dumb" and stream.isatty()


def common_options(*, json: bool = True) -> Callable[[Callable[..., Any]], Callable[..., Any]]:
    """Add --quiet, --verbose, --debug and (if wanted) --json; the command gets `settings` as first argument.

    The same options before the command's name count too.
    """

    def decorate(function: Callable[..., Any]) -> Callable[..., Any]:
        @click.option("--debug", "debug_", is_flag=True, help="Show the traceback of an error.")
        @click.option("--verbose", "-v", "verbose_", is_flag=True, help="Say more on stderr.")
        @click.option("--quiet", "-q", "quiet_", is_flag=True, help="Say only errors on stderr.")
        @click.pass_context
        @functools.wraps(function)
        def command(
            context: click.Context, *args: Any, debug_: bool, verbose_: bool, quiet_: bool, **keywords: Any
        ) -> Any:
            settings = context.ensure_object(Settings)
            settings.debug |= debug_
            if quiet_ and verbose_:
                raise click.UsageError("--quiet and --verbose exclude each other")
            if quiet_ or verbose_:
                settings.verbosity = QUIET if quiet_ else VERBOSE
            if json:
                settings.json |= keywords.pop("json_")
            elif settings.json:
                raise click.UsageError(f"'{context.info_name}' has no JSON output")
            settings.start_logging()
            return function(settings, *args, **keywords)

        if json:
            command = click.option("--json", "json_", is_flag=True, help="Print JSON on stdout.")(command)
        return command

    return decorate
