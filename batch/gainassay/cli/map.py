"""`gainassay map`."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import asdict
from typing import Any

import click

from gainassay.cli import shared
from gainassay.contracts import documents, tables
from gainassay.forms.library import library
from gainassay.job import Source
from gainassay.report import proposal as report
from gainassay.tables.proposal import propose


def source_options(command: Callable[..., None]) -> Callable[..., None]:
    """An option for each key that a job may say of how a table is written, with the schema's own words."""
    for key in reversed(report.OPTIONS):
        said = documents.schema("job")["$defs"]["table"]["properties"][key]
        kind = click.IntRange(said["minimum"], said["maximum"]) if said["type"] == "integer" else str
        help_text = f"{said['description'][0].upper()}{said['description'][1:]}."
        command = click.option(f"--{key.replace('_', '-')}", key, type=kind, help=help_text)(command)
    return command


@click.command()
@click.argument("at", metavar="TABLE")
@click.option(
    "--as",
    "section",
    type=click.Choice(tables.WRITTEN_BY_USERS),
    default="parts",
    show_default=True,
    help="What the table holds.",
)
@source_options
@shared.json_option
def map(at: str, section: str, as_json: bool, **said: Any) -> None:  # the command's name
    """Propose a section of a job for TABLE: a file, folder, pattern or address of a database.

    It is guessed from the table's headers and values, for a person to review; nothing is applied.
    """
    source = Source(section, at, **{key: value for key, value in said.items() if value is not None})
    kinds = {element.name: element.kind for topology in library().values() for element in topology.elements}
    known = tables.stage_columns(kinds) if section == "stages" else {c.name: c for c in tables.columns("parts")}
    proposal = propose(source, known)
    if as_json:
        shared.data(asdict(proposal))
    else:
        shared.lines(report.text(proposal))
