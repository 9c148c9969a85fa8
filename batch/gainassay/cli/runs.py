"""`gainassay runs`."""

from __future__ import annotations

from pathlib import Path

import click

from gainassay import job as jobs
from gainassay.cli import shared
from gainassay.report import run
from gainassay.runs import folder


@click.command()
@shared.job_argument
@shared.json_option
def runs(job: Path, as_json: bool) -> None:
    """List the committed runs of JOB, oldest first."""
    home = jobs.read(job).results.folder
    found = folder.listed(home)
    shared.warn(f"{home / name}: a run in progress" for name in found.in_progress)
    shared.warn(f"{home / name}: a run that was abandoned; it may be deleted" for name in found.abandoned)
    shared.warn(
        f"{home / name}: holds no {folder.MANIFEST} that can be read, so it is no run" for name in found.unreadable
    )
    if as_json:
        shared.data(found.runs)
    elif found.runs:
        shared.lines(run.runs(found.runs))
    else:
        shared.lines([f"There are no runs in {home}"])
