"""`gainassay explain`."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path

import click

from gainassay import explanation, service
from gainassay.cautions import CAUTIONS
from gainassay.cli import shared
from gainassay.report import drawing, pair


@click.command()
@shared.job_argument
@click.argument("stage")
@click.argument("part")
@click.option(
    "--plot", type=click.Path(path_type=Path), metavar="FILE", help="Draw gain and loop gain to an .svg or .png."
)
@shared.json_option
def explain(job: Path, stage: str, part: str, plot: Path | None, as_json: bool) -> None:
    """Show all that decides STAGE with PART in JOB: gains, every term of the error, the worst corner, the evidence."""
    if plot is not None:
        drawing.check(plot)
    prepared = service.prepare(job)
    shared.warn(prepared.warnings())
    groups, rules, samples = service.groups_of(prepared), service.rules_of(prepared.job), prepared.job.results.samples
    found = explanation.explain(
        prepared.stages, prepared.parts, prepared.eligibility, groups, rules, samples, stage, part
    )
    if plot is not None:
        drawing.draw(found, explanation.curves(groups, found), plot)
    if as_json:
        shared.data({**asdict(found), "cautions": CAUTIONS})
    else:
        shared.lines(pair.text(found))
