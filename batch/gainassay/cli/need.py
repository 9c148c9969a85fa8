"""`gainassay need`."""

from __future__ import annotations

from pathlib import Path

import click

from gainassay import service, specification
from gainassay.cautions import CAUTIONS
from gainassay.cli import shared
from gainassay.report import need as report
from gainassay.runs import aside


@click.command()
@shared.job_argument
@click.option("--to", type=click.Path(path_type=Path), metavar="FILE", help="Write the table to a .csv or .parquet.")
@click.option("--workers", type=click.IntRange(min=1), help="Threads. All usable processors if not given.")
@shared.fail_on_option("unmet", "hopeless", "rejected")
@shared.json_option
def need(job: Path, to: Path | None, workers: int | None, fail_on: tuple[str, ...], as_json: bool) -> None:
    """Say what each stage of JOB asks of a part, or why no part can pass.

    The least open-loop gain, however good the rest; beside the stage's best part, the poorest figure of each of its
    quantities that would do, the others as they are; where nothing would do, the tolerance that would. Every number
    is verified by putting it back.
    """
    if to is not None:
        aside.check(to)
    prepared = service.prepare(job)
    shared.warn(prepared.warnings())
    if rejected := prepared.rejected_rows():
        shared.warn([f"rows that were rejected: {rejected:,}; `gainassay check {job}` says why"])
    groups, rules = service.groups_of(prepared), service.rules_of(prepared.job)
    with shared.progress("Screening", prepared.pairs()) as advance:
        table = specification.specify(groups, rules, workers or service.usable_cores(), advance)
    if to is not None:
        aside.write_whole(table, to)
    if as_json:
        shared.data({"stages": table.to_pylist(), "cautions": CAUTIONS})
    else:
        shared.lines(report.text(table))
    shared.meet(fail_on, {**specification.counts(table), "rejected": rejected})
