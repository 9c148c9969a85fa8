"""What a job's tables hold, for a person or a program."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from typing import Any

from gainassay.report.text import table
from gainassay.service import Prepared
from gainassay.tables.rejects import Reject

MOST_LISTED = 20


def text(prepared: Prepared) -> list[str]:
    """Rows found and used, stages of each topology, and the rejected cells."""
    stages, parts = prepared.stages, prepared.parts
    lines = table(
        ["table", "rows", "used", "rejected", "source"],
        [
            ["stages", *_counts(stages.found, stages.count(), stages.rejects), stages.source],
            ["parts", *_counts(parts.found, len(parts.names), parts.rejects), parts.source],
        ],
        right=[1, 2, 3],
    )
    lines += ["", *table(["topology", "stages"], [[g.topology.name, f"{len(g.names):,}"] for g in stages.groups], [1])]
    rejects = [*stages.rejects, *parts.rejects]
    if rejects:
        lines += ["", "Rejected cells"]
        lines += table(
            ["  row", "column", "value", "reason", "source"],
            [[f"  {r.row}", r.column, repr(r.value), r.reason, r.source] for r in rejects[:MOST_LISTED]],
        )
    if len(rejects) > MOST_LISTED:
        lines.append(
            f"  and {len(rejects) - MOST_LISTED:,} more; --json lists all, and a run keeps them in rejected.csv"
        )
    return lines


def data(prepared: Prepared) -> dict[str, Any]:
    """The same, whole."""
    stages, parts = prepared.stages, prepared.parts
    return {
        "stages": {"source": stages.source, "rows": stages.found, "used": stages.count()},
        "parts": {"source": parts.source, "rows": parts.found, "used": len(parts.names)},
        "topologies": {group.topology.name: len(group.names) for group in stages.groups},
        "not_modelled": parts.not_modelled(),
        "warnings": prepared.warnings(),
        "rejected": [asdict(reject) for reject in (*stages.rejects, *parts.rejects)],
    }


def _counts(found: int, used: int, rejects: Sequence[Reject]) -> list[str]:
    return [f"{found:,}", f"{used:,}", f"{len({reject.row for reject in rejects}):,}"]
