"""`gainassay screen`."""

from __future__ import annotations

from pathlib import Path

import click

from gainassay import service
from gainassay.cli import shared
from gainassay.report import run


@click.command()
@shared.job_argument
@click.option("--workers", type=click.IntRange(min=1), help="Threads. All usable processors if not given.")
@click.option(
    "--views/--no-views",
    default=None,
    help="Whether to show root-sum-square and Monte Carlo beside the worst case. As the job says if not given.",
)
@shared.fail_on_option("fail", "unproven", "rejected")
@shared.json_option
def screen(job: Path, workers: int | None, views: bool | None, fail_on: tuple[str, ...], as_json: bool) -> None:
    """Screen all stages of JOB against all its parts, and commit the verdicts as a new run."""
    prepared = service.prepare(job, views)
    shared.warn(prepared.warnings())
    with shared.progress("Screening", prepared.pairs()) as advance:
        done = service.screen(prepared, workers, advance)
    if as_json:
        shared.data({**done.manifest, "folder": str(done.folder), "stages_without_a_pass": done.hopeless})
    else:
        shared.lines(run.summary(done.manifest, done.folder, done.hopeless))
    shared.meet(fail_on, {**done.manifest["verdicts"], "rejected": prepared.rejected_rows()})
