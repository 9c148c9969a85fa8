"""`gainassay topologies`."""

from __future__ import annotations

from dataclasses import asdict

import click

from gainassay.cli import shared
from gainassay.forms.library import library
from gainassay.report import formulas


@click.command()
@click.option("--formulas", "as_page", is_flag=True, help="Print a page of Markdown with the formulas of all.")
@shared.json_option
def topologies(as_page: bool, as_json: bool) -> None:
    """List the topologies, with the columns of their elements; those in brackets may be blank."""
    found = list(library().values())
    if as_page:
        shared.lines(formulas.page(found))
    elif as_json:
        shared.data([{key: value for key, value in asdict(t).items() if key != "source"} for t in found])
    else:
        shared.lines(formulas.listing(found))
