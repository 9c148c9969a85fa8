"""A job carried out, from its file to the committed run."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow.compute as pc
from numpy.typing import NDArray

from gainassay import job as jobs
from gainassay.contracts.evidence import EVIDENCE
from gainassay.forms.cache import duty_of, form_of
from gainassay.forms.departures import AT_DC, BASIC, DEPARTURES, derived_with
from gainassay.forms.form import Form
from gainassay.forms.library import library
from gainassay.forms.topology import Topology
from gainassay.job import Job, Results
from gainassay.runs import folder as run_folder
from gainassay.runs import summaries
from gainassay.runs import tables as run_tables
from gainassay.runs.folder import File, write
from gainassay.runs.manifest import manifest
from gainassay.screen import at_frequency, blocks, boxes, calibrated, corners, limits, need
from gainassay.screen.blocks import Group, Screened
from gainassay.screen.boxes import StageBox
from gainassay.screen.corners import PartSide, moving_terms
from gainassay.screen.limits import Bounds
from gainassay.screen.stability import Dynamics
from gainassay.screen.verdicts import Rules
from gainassay.tables import eligible
from gainassay.tables import parts as part_tables
from gainassay.tables import stages as stage_tables
from gainassay.tables.compared import compared
from gainassay.tables.eligible import Eligibility
from gainassay.tables.parts import SECOND_POLE, PartTable
from gainassay.tables.stages import StageGroup, StageTable

MOST_LISTED = 3
"""Stages that a warning names."""


@dataclass(frozen=True)
class Prepared:
    """A job with its tables read and checked.

    Attributes
    ----------
    eligibility : tuple[Eligibility, ...]
        Which parts may serve the stages of each group.
    """

    started: datetime
    job: Job
    topologies: Mapping[str, Topology]
    stages: StageTable
    parts: PartTable
    eligibility: tuple[Eligibility, ...]

    def warnings(self) -> tuple[str, ...]:
        """Everything that a user should know before believing the results."""
        # The others that are not modelled are named by the run's summary and manifest.
        unmodelled = tuple(
            f"{self.parts.source}: there is no column for {departure.quantity}; it is not modelled"
            for departure in BASIC
            if departure.quantity in self.parts.not_modelled(at_frequency=False)
        )
        unmodelled += tuple(self._of_calibrated())
        unserved = self.unserved()
        alone = (f"{self.stages.source}: no part is eligible for {_listed(unserved)}",) if unserved else ()
        return (*self.stages.warnings, *self.parts.warnings, *unmodelled, *self._of_stability(), *alone)

    def _of_calibrated(self) -> Iterator[str]:
        """What the parts table gives and the forms of calibrated stages have not."""
        if not any(group.calibrated for group in self.stages.groups):
            return
        left = set(derived_with(self.parts.modelled)) - set(derived_with(self.parts.modelled, calibrated=True))
        for departure in sorted(left, key=DEPARTURES.index):
            yield f"{self.stages.source}: of calibrated stages {departure.quantity} is not modelled"

    def _of_stability(self) -> Iterator[str]:
        """What the parts table lacks of what the job asks of stability."""
        if not self.job.results.stability and self.job.judge.phase_margin_min_deg is None:
            return
        if np.isnan(self.parts.gbw()).all():
            yield f"{self.parts.source}: no part has a gbw_typ or gbw_min; no stability is checked"
        if self.parts.second_pole is None:
            yield f"{self.parts.source}: there is no column for {SECOND_POLE}; it is not modelled"

    def pairs(self) -> int:
        """Pairs to screen."""
        return sum(one.pairs() for one in self.eligibility)

    def not_eligible(self) -> dict[str, int]:
        """Pairs that each rule, in the order of the job, is the first to exclude."""
        counts = sum((one.not_eligible() for one in self.eligibility), np.zeros(len(self.job.eligible), np.int64))
        return dict(zip((rule.name for rule in self.job.eligible), counts.tolist(), strict=True))

    def never_eligible(self) -> dict[str, int]:
        """Stages without an eligible part, and parts without an eligible stage."""
        serving = np.logical_or.reduce([one.serving() for one in self.eligibility])
        return {"stages": len(self.unserved()), "parts": int((~serving).sum())}

    def unserved(self) -> list[str]:
        """Stages without an eligible part."""
        each = zip(self.stages.groups, self.eligibility, strict=True)
        return sorted(name for group, one in each for name in group.names[~one.served()].tolist())

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
    of_stages, of_parts = compared(job.eligible, stage_tables.kinds(topologies))
    stages = stage_tables.load(job.stages, topologies, of_stages)
    parts = part_tables.load(job.parts, job.assume, of_parts)
    stages = _with_departures(stages, parts)
    eligibility = tuple(eligible.relate(job.eligible, group, parts) for group in stages.groups)
    return Prepared(started, job, topologies, stages, parts, eligibility)


def _with_departures(stages: StageTable, parts: PartTable) -> StageTable:
    """The stages with the forms of all departures that the parts model.

    Raises
    ------
    InputError
        If a form would be too large.
    """
    groups = tuple(replace(group, form=_form(group, parts)) for group in stages.groups)
    return replace(stages, groups=groups)


def _form(group: StageGroup, parts: PartTable) -> Form:
    departures = derived_with(parts.modelled, group.calibrated, group.signals is not None)
    return group.form if departures == BASIC else form_of(group.topology, departures)


def groups_of(prepared: Prepared) -> tuple[Group, ...]:
    """The screen of all stages against the parts that may serve them, one group for each topology and condition."""
    parts, dynamics = prepared.parts, dynamics_of(prepared.parts)
    return tuple(
        blocks.group(
            group.form,
            (group.names, box_of(group)),
            (parts.names, parts_of(group, parts)),
            eligibility.patterns(),
            bounds_of(group, parts),
            dynamics,
        )
        for group, eligibility in zip(prepared.stages.groups, prepared.eligibility, strict=True)
    )


def parts_of(group: StageGroup, parts: PartTable) -> PartSide:
    """All parts, under the conditions of a group's stages."""
    limits, evidence = (parts.worst_hot, parts.evidence_hot) if group.hot else (parts.worst, parts.evidence)
    if group.signals is not None:
        return at_frequency.part_side(parts.nominal, limits, parts.lags(), evidence)
    if not group.calibrated:
        return corners.part_side(group.form, parts.nominal[AT_DC], limits[AT_DC], evidence[AT_DC])
    weakest = np.maximum(np.maximum(parts.evidence, evidence), parts.evidence_change)
    return calibrated.part_side(group.form, parts.worst[AT_DC], limits[AT_DC], parts.change[AT_DC], weakest[AT_DC])


def dynamics_of(parts: PartTable) -> Dynamics:
    """All parts over frequency, at their nominal figures."""
    pole = np.full(len(parts.names), np.inf) if parts.second_pole is None else parts.second_pole
    return Dynamics(parts.nominal, parts.gbw(), pole)


def box_of(group: StageGroup) -> StageBox:
    """The stages of a group with their boxes."""
    spreads = group.spreads
    found = boxes.box(group.values, spreads.own, group.limits, group.targets, spreads.network, spreads.ratios)
    return replace(found, signals=group.signals)


def bounds_of(group: StageGroup, parts: PartTable) -> Bounds:
    """The operating limits of a group's stages and all parts."""
    asked = limits.conditions(group.form, duty_of(group.topology), group.values, group.operating, group.signals)
    return limits.bounds(asked, parts.operating)


def rules_of(job: Job) -> Rules:
    """The decision rule that a job asks for."""
    judge = job.judge
    return Rules(judge.guard_band_pct / 100.0, EVIDENCE.index(judge.basis), judge.phase_margin_min_deg)


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
    groups, rules = groups_of(prepared), rules_of(job)
    terms = _terms(groups) if results.terms else ()
    fingerprint = f"{prepared.stages.sha256} {prepared.parts.sha256} {job.document}"
    with run_folder.begin(results.folder, prepared.started, fingerprint) as unfinished:
        (unfinished.folder / "verdicts").mkdir()

        def keep(place: int, screened: Screened) -> list[File]:
            return _write_verdicts(unfinished.folder, place, screened, rules, results, terms)

        samples = results.samples if results.views else None
        cores = workers or usable_cores()
        done = blocks.run(
            groups, rules, keep, cores, after_each=after_each, samples=samples, stability=results.stability
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
            not_eligible=prepared.not_eligible(),
            never_eligible=prepared.never_eligible(),
            files=files,
        )
        committed = unfinished.commit(content)
    hopeless = stages.column("stage").filter(pc.equal(stages.column("pass"), 0)).to_pylist()
    return Done(committed, content, tuple(hopeless))


def _terms(groups: Sequence[Group]) -> tuple[str, ...]:
    """Terms that any stage of a screen can have, in the order of the accounts."""
    return tuple(dict.fromkeys(name for group in groups for name in moving_terms(group.term_names(), group.box)))


def _needs(screened: Screened, rules: Rules) -> NDArray[np.float64]:
    """What each pair needs, where such is found."""
    if not screened.group.method.has_more:
        return np.full((len(DEPARTURES), *screened.eligible.shape), np.nan)
    return need.needed(need.of_chunk(screened, rules))


def _write_verdicts(
    folder: Path,
    place: int,
    screened: Screened,
    rules: Rules,
    results: Results,
    terms: Sequence[str],
) -> list[File]:
    if results.rows == "none":
        return []
    needs = _needs(screened, rules) if results.need else None
    table = run_tables.verdict_table(screened, results.rows, terms, needs, results.margins, results.stability)
    # Named after the chunk's place, so that the order of the files is the order of the rows.
    name = f"verdicts/{place:05d}-{screened.group.form.topology}"
    return [write(folder, f"{name}.{kind}", table) for kind in results.formats]


def _listed(names: Sequence[str]) -> str:
    more = len(names) - MOST_LISTED
    return ", ".join(names[:MOST_LISTED]) + (f" and {more:,} more" if more > 0 else "")
