"""`gainassay columns`."""

from __future__ import annotations

import click

from gainassay.cli import shared
from gainassay.report import columns as report


@click.command()
@click.argument("names", metavar="[COLUMN]...", nargs=-1, shell_complete=shared.complete_columns)
@click.option("--page", "as_page", is_flag=True, help="Print a page of Markdown with all tables and the job's keys.")
@shared.json_option
def columns(names: tuple[str, ...], as_page: bool, as_json: bool) -> None:
    """Say what each [COLUMN]... means, with its unit and limits; without one, list those of stages and parts."""
    found = report.chosen(names)
    if as_page:
        shared.lines(report.page())
    elif as_json:
        shared.data(report.data(found))
    else:
        shared.lines(report.listing(found))
