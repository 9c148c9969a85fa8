"""A job carried out, from its file to the committed run."""

from __future__ import annotations

import os
import platform
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from time import monotonic
from typing import Any

import numpy as np
import pyarrow as pa

from gainassay import job as jobs
from gainassay.cautions import CAUTIONS
from gainassay.forms.cache import content_hash
from gainassay.forms.library import library
from gainassay.forms.topology import Topology
from gainassay.job import Job
from gainassay.runs import folder as run_folder
from gainassay.runs import summaries
from gainassay.runs import tables as run_tables
from gainassay.screen import blocks
from gainassay.screen.blocks import Group, Screened, Tally
from gainassay.screen.corners import StageBox, term_names
from gainassay.screen.verdicts import VERDICTS
from gainassay.tables import parts as part_tables
from gainassay.tables import stages as stage_tables
from gainassay.tables.parts import PartTable
from gainassay.tables.stages import StageTable

PACKAGES = ("numpy", "pyarrow", "dask", "sympy")
"""Packages whose versions a manifest records."""


@dataclass(frozen=True)
class Prepared:
    """A job with its tables read and checked."""

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
        return sum(len({reject.row for reject in rejects}) for rejects in (self.stages.rejects, self.parts.rejects))


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


def prepare(path: Path) -> Prepared:
    """Read a job and its tables.

    Raises
    ------
    InputError
        If the job or a table cannot be used.
    """
    job = jobs.read(path)
    topologies = library(job.topologies)
    return Prepared(job, topologies, stage_tables.load(job.stages, topologies), part_tables.load(job.parts, job.assume))


def groups_of(stages: StageTable, parts: PartTable) -> tuple[Group, ...]:
    """The screen of all stages against all parts, one group for each topology."""
    return tuple(
        blocks.group(
            group.form,
            group.names,
            StageBox(group.values, group.tolerances, group.limits, group.targets),
            parts.names,
            parts.nominal,
            parts.worst,
            parts.evidence,
        )
        for group in stages.groups
    )


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
    start = monotonic()
    job, results = prepared.job, prepared.job.results
    groups = groups_of(prepared.stages, prepared.parts)
    terms = tuple(dict.fromkeys(name for group in groups for name in term_names(group.form))) if results.terms else ()
    fingerprint = f"{prepared.stages.sha256} {prepared.parts.sha256} {job.document}"
    with run_folder.begin(results.folder, fingerprint) as unfinished:
        (unfinished.folder / "verdicts").mkdir()

        def keep(place: int, screened: Screened) -> list[run_folder.File]:
            return _write_verdicts(unfinished.folder, place, screened, job, terms)

        done = blocks.run(groups, keep, workers or usable_cores(), after_each=after_each)
        for files, _ in done:
            unfinished.files.extend(files)
        tallies = [tally for _, tally in done]
        summary_tables = {
            "stages.parquet": summaries.stage_summary(groups, tallies),
            "parts.parquet": summaries.part_summary(groups, tallies),
        }
        for name, table in summary_tables.items():
            path = unfinished.folder / name
            run_tables.write_parquet(table, path)
            unfinished.files.append(run_folder.file_of(unfinished.folder, path, table.num_rows))
        rejected = run_tables.rejected_table([*prepared.stages.rejects, *prepared.parts.rejects])
        path = unfinished.folder / "rejected.csv"
        run_tables.write_csv(rejected, path)
        unfinished.files.append(run_folder.file_of(unfinished.folder, path, rejected.num_rows))

        manifest = _manifest(prepared, groups, tallies, unfinished.started.isoformat(timespec="seconds"))
        manifest["seconds"] = round(monotonic() - start, 3)
        committed = unfinished.commit(manifest)
    stages = summary_tables["stages.parquet"]
    hopeless = stages.column("stage").filter(pa.compute.equal(stages.column("pass"), 0)).to_pylist()
    return Done(committed, {"run": unfinished.run, **manifest}, tuple(hopeless))


def _write_verdicts(
    folder: Path, place: int, screened: Screened, job: Job, terms: Sequence[str]
) -> list[run_folder.File]:
    if job.results.rows == "none":
        return []
    table = run_tables.verdict_table(screened, job.results.rows, terms)
    writers = {"parquet": run_tables.write_parquet, "csv": run_tables.write_csv}
    files = []
    for kind in job.results.formats:
        # Named after the chunk's place, so that the order of the files is the order of the rows.
        path = folder / "verdicts" / f"{place:05d}-{screened.group.form.topology}.{kind}"
        writers[kind](table, path)
        files.append(run_folder.file_of(folder, path, table.num_rows))
    return files


def _manifest(prepared: Prepared, groups: Sequence[Group], tallies: Sequence[Tally], started: str) -> dict[str, Any]:
    verdicts = sum((tally.by_stage.sum(axis=0) for tally in tallies), np.zeros(len(VERDICTS), np.int64))
    dominant: dict[str, int] = {}
    for tally in tallies:
        for name, count in zip(term_names(groups[tally.chunk.group].form), tally.dominant.tolist(), strict=True):
            dominant[name] = dominant.get(name, 0) + count
    tables: dict[str, StageTable | PartTable] = {"stages": prepared.stages, "parts": prepared.parts}
    usable = {"stages": prepared.stages.count(), "parts": len(prepared.parts.names)}
    return {
        "started": started,
        "versions": {
            "gainassay": version("gainassay"),
            "python": platform.python_version(),
            **{name: version(name) for name in PACKAGES},
        },
        "job": {"file": str(prepared.job.path), "content": dict(prepared.job.document)},
        "inputs": {
            name: {
                "source": table.source,
                "sha256": table.sha256,
                "rows": table.found,
                "used": usable[name],
                "rejected": len({reject.row for reject in table.rejects}),
            }
            for name, table in tables.items()
        },
        "forms": {
            group.topology.name: {"topology": group.topology.content_hash(), "form": content_hash(group.form)}
            for group in prepared.stages.groups
        },
        "not_modelled": list(prepared.parts.not_modelled()),
        "warnings": list(prepared.warnings()),
        "pairs": int(verdicts.sum()),
        "verdicts": dict(zip(VERDICTS, verdicts.tolist(), strict=True)),
        "dominant_terms": dict(
            sorted(((n, c) for n, c in dominant.items() if c), key=lambda item: (-item[1], item[0]))
        ),
        "cautions": list(CAUTIONS),
    }
