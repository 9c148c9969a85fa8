"""`gainassay topologies`."""

from __future__ import annotations

from dataclasses import asdict

import click

from gainassay.cli import shared
from gainassay.forms.library import library
from gainassay.report.text import table


@click.command()
@shared.json_option
def topologies(as_json: bool) -> None:
    """List the built-in topologies, with the columns of their elements; those in brackets may be blank."""
    found = library().values()
    if as_json:
        shared.data([{key: v for key, v in asdict(t).items() if key != "source"} for t in found])
        return
    rows = [
        [t.name, " ".join(e.name if e.absent == "error" else f"[{e.name}]" for e in t.elements), t.summary]
        for t in found
    ]
    shared.lines(table(["topology", "elements", "summary"], rows))
