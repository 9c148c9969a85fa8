"""What a job's tables hold, for a person or a program."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

from gainassay.report import eligible
from gainassay.report.text import table
from gainassay.service import Prepared
from gainassay.tables.parts import PartTable
from gainassay.tables.stages import StageTable

MOST_LISTED = 20


def text(prepared: Prepared) -> list[str]:
    """Rows found and used, stages of each topology, eligible pairs, and the rejected cells of each table."""
    tables: dict[str, StageTable | PartTable] = {"stages": prepared.stages, "parts": prepared.parts}
    lines = table(
        ["table", "rows", "used", "rejected", "source"],
        [[name, f"{t.rows:,}", f"{t.used():,}", f"{t.rejected_rows():,}", t.source] for name, t in tables.items()],
        right=[1, 2, 3],
    )
    rows = [[group.topology.name, f"{len(group.names):,}"] for group in prepared.stages.groups]
    lines += ["", *table(["topology", "stages"], rows, right=[1])]
    lines += eligible.text(prepared.pairs(), prepared.not_eligible(), prepared.never_eligible())
    for one in tables.values():
        if one.rejects:
            lines += ["", f"Rejected cells of {one.source}"]
            lines += table(
                ["  row", "column", "value", "reason"],
                [[f"  {r.row}", r.column, repr(r.value), r.reason] for r in one.rejects[:MOST_LISTED]],
            )
        if len(one.rejects) > MOST_LISTED:
            more = len(one.rejects) - MOST_LISTED
            lines.append(f"  and {more:,} more; --json lists all, and a run keeps them in rejected.csv")
    return lines


def data(prepared: Prepared) -> dict[str, Any]:
    """The same, whole."""
    stages, parts = prepared.stages, prepared.parts
    return {
        "stages": {"source": stages.source, "rows": stages.rows, "used": stages.used()},
        "parts": {"source": parts.source, "rows": parts.rows, "used": parts.used()},
        "topologies": {group.topology.name: len(group.names) for group in stages.groups},
        "pairs": prepared.pairs(),
        "not_eligible": prepared.not_eligible(),
        "never_eligible": prepared.never_eligible(),
        "not_modelled": parts.not_modelled(),
        "warnings": prepared.warnings(),
        "rejected": [asdict(reject) for reject in (*stages.rejects, *parts.rejects)],
    }
