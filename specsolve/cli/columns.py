"""``specsolve columns``: the columns of every table, from the schema."""

from __future__ import annotations

import json

import click

from specsolve.cli.settings import Settings, common_options
from specsolve.schema import SCHEMA, TABLES, columns_of, describe

RULE = "rule"


@click.command(epilog="Example: specsolve columns input")
@click.argument("kind", type=click.Choice([*TABLES, RULE]), required=False)
@common_options()
def columns(settings: Settings, kind: str | None) -> None:
    """Explain the columns of the tables read (input) and written (stars, lines, candidates, decisions).

    "rule" explains how one of several candidates is chosen, the steps in the decisions table.
    """
    if kind == RULE:
        text = rule_text()
        click.echo(json.dumps({"schema": SCHEMA, "rule": text}) if settings.json else text)
        return
    kinds = [kind] if kind else list(TABLES)
    if settings.json:
        tables = {name: [vars(column) | {"shape": list(column.shape)} for column in columns_of(name)] for name in kinds}
        click.echo(json.dumps({"schema": SCHEMA, "tables": tables}, indent=1))
        return
    for name in kinds:
        click.echo(f"{name}\n{describe(name)}\n")


def rule_text() -> str:
    """The tie-break rule as its module states it."""
    from specsolve.balance import tiebreak

    return tiebreak.__doc__.strip()
