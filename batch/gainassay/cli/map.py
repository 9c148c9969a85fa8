"""`gainassay map`."""

from __future__ import annotations

from dataclasses import asdict

import click

from gainassay.cli import shared
from gainassay.contracts import tables
from gainassay.forms.library import library
from gainassay.job import Source
from gainassay.report import proposal as report
from gainassay.tables.proposal import propose


@click.command()
@click.argument("at", metavar="TABLE")
@click.option(
    "--as",
    "section",
    type=click.Choice(["parts", "stages"]),
    default="parts",
    show_default=True,
    help="What the table holds.",
)
@click.option("--delimiter", default="", metavar="MARK", help="What separates the cells of a text file.")
@click.option("--encoding", default="", help="The encoding of a text file.")
@click.option("--sheet", default="", help="The sheet of a workbook.")
@click.option("--header-row", type=click.IntRange(1), default=None, help="The row that holds the columns' names.")
@click.option("--table", default="", help="The table of a database.")
@click.option("--query", default="", help="A select statement for a database.")
@shared.json_option
def map(  # the command's name
    at: str,
    section: str,
    delimiter: str,
    encoding: str,
    sheet: str,
    header_row: int | None,
    table: str,
    query: str,
    as_json: bool,
) -> None:
    """Propose a section of a job for TABLE: a file, folder, pattern or address of a database.

    It is guessed from the table's headers and values, for a person to review; nothing is applied.
    """
    source = Source(
        section,
        at,
        delimiter=delimiter,
        encoding=encoding,
        sheet=sheet,
        header_row=header_row or 0,
        table=table,
        query=query,
    )
    kinds = {element.name: element.kind for topology in library().values() for element in topology.elements}
    known = tables.stage_columns(kinds) if section == "stages" else {c.name: c for c in tables.columns("parts")}
    proposal = propose(source, known)
    if as_json:
        shared.data(asdict(proposal))
    else:
        shared.lines(report.text(proposal))
