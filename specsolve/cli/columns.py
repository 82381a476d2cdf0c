"""``specsolve columns``: the columns of every table, from the schema."""

from __future__ import annotations

import json

import click

from specsolve.cli.settings import Settings, common_options
from specsolve.schema import SCHEMA, TABLES, columns_of, describe


@click.command(epilog="Example: specsolve columns input")
@click.argument("kind", type=click.Choice(list(TABLES)), required=False)
@common_options()
def columns(settings: Settings, kind: str | None) -> None:
    """Explain the columns of the tables read (input) and written (stars, lines, candidates, decisions)."""
    kinds = [kind] if kind else list(TABLES)
    if settings.json:
        tables = {name: [vars(column) | {"shape": list(column.shape)} for column in columns_of(name)] for name in kinds}
        click.echo(json.dumps({"schema": SCHEMA, "tables": tables}, indent=1))
        return
    for name in kinds:
        click.echo(f"{name}\n{describe(name)}\n")
