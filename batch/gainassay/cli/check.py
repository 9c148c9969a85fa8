"""`gainassay check`."""

from __future__ import annotations

from pathlib import Path

import click

from gainassay import service
from gainassay.cli import shared
from gainassay.report import check as report


@click.command()
@shared.job_argument
@shared.fail_on_option("rejected")
@shared.json_option
def check(job: Path, fail_on: tuple[str, ...], as_json: bool) -> None:
    """Read the tables of JOB and say what is in them: rows, columns, rejects, eligible pairs. Nothing is written."""
    prepared = service.prepare(job)
    shared.warn(prepared.warnings())
    if as_json:
        shared.data(report.data(prepared))
    else:
        shared.lines(report.text(prepared))
    shared.meet(fail_on, {"rejected": prepared.rejected_rows()})
