"""A job carried out, from its file to the committed run."""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import pyarrow.compute as pc

from gainassay import job as jobs
from gainassay.contracts.evidence import EVIDENCE
from gainassay.forms.library import library
from gainassay.forms.topology import Topology
from gainassay.job import Job, Results
from gainassay.runs import folder as run_folder
from gainassay.runs import summaries
from gainassay.runs import tables as run_tables
from gainassay.runs.folder import File, write
from gainassay.runs.manifest import manifest
from gainassay.screen import blocks, boxes
from gainassay.screen.blocks import Group, Screened
from gainassay.screen.boxes import StageBox
from gainassay.screen.corners import moving_terms
from gainassay.screen.verdicts import Rules
from gainassay.tables import parts as part_tables
from gainassay.tables import stages as stage_tables
from gainassay.tables.parts import PartTable
from gainassay.tables.stages import StageGroup, StageTable


@dataclass(frozen=True)
class Prepared:
    """A job with its tables read and checked."""

    started: datetime
    job: Job
    topologies: Mapping[str, Topology]
    stages: StageTable
    parts: PartTable

    def warnings(self) -> tuple[str, ...]:
        """Everything that a user should know before believing the results."""
        unmodelled = tuple(
            f"{self.parts.source}: there is no column for {quantity}; it is not modelled"
            for quantity in self.parts.not_modelled()
        )
        return (*self.stages.warnings, *self.parts.warnings, *unmodelled)

    def rejected_rows(self) -> int:
        """Rows of both tables that were left out."""
        return self.stages.rejected_rows() + self.parts.rejected_rows()


@dataclass(frozen=True)
class Done:
    """A committed run.

    Attributes
    ----------
    folder : Path
        Where its files lie.
    manifest : Mapping[str, Any]
        What `run.json` says.
    hopeless : tuple[str, ...]
        Stages that no part passes.
    """

    folder: Path
    manifest: Mapping[str, Any]
    hopeless: tuple[str, ...]


def prepare(path: Path, views: bool | None = None) -> Prepared:
    """Read a job and its tables.

    Parameters
    ----------
    views : bool, optional
        Whether verdict tables show root-sum-square and Monte Carlo; as the job says if not given.

    Raises
    ------
    InputError
        If the job or a table cannot be used.
    """
    started = datetime.now(UTC)
    job = jobs.read(path)
    if views is not None:
        job = replace(job, results=replace(job.results, views=views))
    topologies = library(job.topologies)
    stages, parts = stage_tables.load(job.stages, topologies), part_tables.load(job.parts, job.assume)
    return Prepared(started, job, topologies, stages, parts)


def groups_of(stages: StageTable, parts: PartTable) -> tuple[Group, ...]:
    """The screen of all stages against all parts, one group for each topology."""
    return tuple(
        blocks.group(
            group.form,
            group.names,
            box_of(group),
            parts.names,
            parts.nominal,
            parts.worst_hot if group.hot else parts.worst,
            parts.evidence_hot if group.hot else parts.evidence,
        )
        for group in stages.groups
    )


def box_of(group: StageGroup) -> StageBox:
    """The stages of a group with their boxes."""
    spreads = group.spreads
    return boxes.box(group.values, spreads.own, group.limits, group.targets, spreads.network, spreads.ratios)


def rules_of(job: Job) -> Rules:
    """The decision rule that a job asks for."""
    return Rules(guard_band=job.judge.guard_band_pct / 100.0, basis=EVIDENCE.index(job.judge.basis))


def usable_cores() -> int:
    """Processors that this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def screen(prepared: Prepared, workers: int | None = None, after_each: Callable[[int], None] | None = None) -> Done:
    """Screen all pairs of a job and commit the run.

    Parameters
    ----------
    workers : int, optional
        Threads; all usable processors if not given.
    after_each : callable, optional
        Called with a number of pairs whenever so many more are done.

    Raises
    ------
    InputError
        If results cannot be written; nothing is left behind then.
    """
    job, results = prepared.job, prepared.job.results
    groups = groups_of(prepared.stages, prepared.parts)
    terms = (
        tuple(dict.fromkeys(name for group in groups for name in moving_terms(group.form, group.box)))
        if results.terms
        else ()
    )
    fingerprint = f"{prepared.stages.sha256} {prepared.parts.sha256} {job.document}"
    with run_folder.begin(results.folder, prepared.started, fingerprint) as unfinished:
        (unfinished.folder / "verdicts").mkdir()

        def keep(place: int, screened: Screened) -> list[File]:
            return _write_verdicts(unfinished.folder, place, screened, results, terms)

        samples = results.samples if results.views else None
        done = blocks.run(
            groups, rules_of(job), keep, workers or usable_cores(), after_each=after_each, samples=samples
        )
        tallies = [tally for _, tally in done]
        stages = summaries.stage_summary(groups, tallies)
        rejects = [*prepared.stages.rejects, *prepared.parts.rejects]
        files = [file for written, _ in done for file in written]
        files += [
            write(unfinished.folder, "stages.parquet", stages),
            write(unfinished.folder, "parts.parquet", summaries.part_summary(groups, tallies)),
            write(unfinished.folder, "rejected.csv", run_tables.rejected_table(rejects)),
        ]
        content = manifest(
            run=unfinished.run,
            started=prepared.started,
            job=job,
            stages=prepared.stages,
            parts=prepared.parts,
            warnings=prepared.warnings(),
            counts=summaries.counts(groups, tallies),
            files=files,
        )
        committed = unfinished.commit(content)
    hopeless = stages.column("stage").filter(pc.equal(stages.column("pass"), 0)).to_pylist()
    return Done(committed, content, tuple(hopeless))


def _terms(groups: Sequence[Group]) -> tuple[str, ...]:
    """Terms that any stage of a screen can have, in the order of the accounts."""
    return tuple(dict.fromkeys(name for group in groups for name in moving_terms(group.form, group.box)))


def _write_verdicts(folder: Path, place: int, screened: Screened, results: Results, terms: Sequence[str]) -> list[File]:
    if results.rows == "none":
        return []
    table = run_tables.verdict_table(screened, results.rows, terms)
    # Named after the chunk's place, so that the order of the files is the order of the rows.
    name = f"verdicts/{place:05d}-{screened.group.form.topology}"
    return [write(folder, f"{name}.{kind}", table) for kind in results.formats]
