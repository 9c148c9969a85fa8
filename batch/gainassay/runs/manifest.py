"""The manifest of a run: what went in, what came out, and what made it."""

from __future__ import annotations

import platform
from collections.abc import Mapping, Sequence
from dataclasses import asdict
from datetime import UTC, datetime
from importlib.metadata import version
from typing import Any

from gainassay.cautions import CAUTIONS
from gainassay.forms.cache import content_hash
from gainassay.forms.departures import DEPARTURES, PLACE
from gainassay.job import Job
from gainassay.runs.folder import File
from gainassay.runs.summaries import Counts
from gainassay.screen.monte_carlo import SEED
from gainassay.screen.rss import COVERAGE_FACTOR
from gainassay.tables.parts import PartTable
from gainassay.tables.rejects import by_reason
from gainassay.tables.stages import StageTable

PACKAGES = ("gainassay", "dask", "numpy", "pyarrow", "sympy")
"""Packages whose versions a manifest records."""


def manifest(
    *,
    run: str,
    started: datetime,
    job: Job,
    stages: StageTable,
    parts: PartTable,
    warnings: Sequence[str],
    counts: Counts,
    not_eligible: Mapping[str, int],
    never_eligible: Mapping[str, int],
    files: Sequence[File],
) -> dict[str, Any]:
    """What `run.json` says.

    `seconds` counts from `started`, when the job was opened, to now; `not_eligible` the pairs that each rule is the
    first to exclude, `never_eligible` the stages and the parts that are left without a partner.
    """
    tables: dict[str, StageTable | PartTable] = {"stages": stages, "parts": parts}
    return {
        "run": run,
        "started": started.isoformat(timespec="seconds"),
        "seconds": round((datetime.now(UTC) - started).total_seconds(), 3),
        "versions": {"python": platform.python_version(), **{name: version(name) for name in PACKAGES}},
        "job": {"file": str(job.path), "content": dict(job.document)},
        "inputs": {
            name: {
                "source": table.source,
                "sha256": table.sha256,
                "rows": table.rows,
                "used": table.used(),
                "rejected": table.rejected_rows(),
                "rejected_cells": by_reason(table.rejects),
            }
            for name, table in tables.items()
        },
        "forms": _forms(stages),
        "not_modelled": list(parts.not_modelled(stages.any_at_frequency())),
        "warnings": list(warnings),
        "pairs": sum(counts.verdicts.values()),
        "not_eligible": dict(not_eligible),
        "never_eligible": dict(never_eligible),
        "verdicts": counts.verdicts,
        "views": {"coverage_factor": COVERAGE_FACTOR, "samples": job.results.samples, "seed": SEED}
        if job.results.views
        else None,
        "dominant_terms": counts.dominant_terms,
        "limits": counts.limits,
        "cautions": list(CAUTIONS),
        "files": [asdict(file) for file in sorted(files, key=lambda file: file.path)],
    }


def _forms(stages: StageTable) -> dict[str, Any]:
    """Hashes of each topology and of the forms that its stages have: one for each set of departures."""
    found: dict[str, Any] = {}
    for group in stages.groups:
        entry = found.setdefault(group.topology.name, {"topology": group.topology.content_hash(), "forms": {}})
        quantities = dict.fromkeys(DEPARTURES[PLACE[symbol]].quantity for _, symbol in group.form.departures)
        named = ", ".join(quantities)
        if named not in entry["forms"]:
            entry["forms"][named] = content_hash(group.form)
    return found
