"""What a job's tables hold, for a person or a program."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import asdict
from typing import Any

from gainassay.job import Heading
from gainassay.report import eligible
from gainassay.report.text import table
from gainassay.service import Prepared
from gainassay.tables.checks import ColumnUse
from gainassay.tables.parts import PartTable
from gainassay.tables.rejects import Reject, by_reason
from gainassay.tables.stages import StageTable

MOST_LISTED = 20
WIDTH = 100


def text(prepared: Prepared) -> list[str]:
    """Rows and columns of each table, stages of each topology, eligible pairs, and the rejected cells by reason."""
    tables: dict[str, StageTable | PartTable] = {"stages": prepared.stages, "parts": prepared.parts}
    lines = table(
        ["table", "rows", "used", "rejected", "source"],
        [[name, f"{t.rows:,}", f"{t.used():,}", f"{t.rejected_rows():,}", t.source] for name, t in tables.items()],
        right=[1, 2, 3],
    )
    for name, one in tables.items():
        lines += ["", f"Columns of the {name}", *_columns(one.columns)]
    rows = [[group.topology.name, f"{len(group.names):,}"] for group in prepared.stages.groups]
    lines += ["", *table(["topology", "stages"], rows, right=[1])]
    lines += eligible.text(prepared.pairs(), prepared.not_eligible(), prepared.never_eligible())
    for name, one in tables.items():
        if one.rejects:
            lines += ["", f"Rejected cells of the {name}, by reason", *_reasons(one.rejects)]
            lines += ["", f"Rejected cells of the {name}", *_rejects(one.rejects)]
    return lines


def _columns(use: ColumnUse) -> Iterator[str]:
    """What became of the columns, a kind to a paragraph."""
    kinds = {
        "found": use.found,
        "mapped": tuple(map(_mapped, use.mapped)),
        "missing": use.missing,
        "unknown": use.unknown,
    }
    for kind, names in kinds.items():
        for first, line in enumerate(_filled(names)):
            yield f"  {'' if first else kind:9}{line}"


def _filled(names: tuple[str, ...]) -> Iterator[str]:
    """Names one after the other, in lines of some width; a dash where there are none."""
    line = ""
    for name in names:
        if line and len(line) + len(name) > WIDTH:
            yield f"{line},"
            line = ""
        line = f"{line}, {name}" if line else name
    yield line or "-"


def _mapped(heading: Heading) -> str:
    if heading.value is not None:
        return f"{heading.ours} = {heading.value!r} in every row"
    return f"'{heading.theirs}' = {heading.ours}{f' in {heading.unit}' if heading.unit else ''}"


def _reasons(rejects: tuple[Reject, ...]) -> list[str]:
    counts = list(by_reason(rejects).items())
    lines = table(["  cells", "reason"], [[f"{count:,}", reason] for reason, count in counts[:MOST_LISTED]], right=[0])
    return lines + _more(len(counts) - MOST_LISTED, "reasons")


def _rejects(rejects: tuple[Reject, ...]) -> list[str]:
    several = len({reject.source for reject in rejects}) > 1
    header = ["  row", "name", "column", "value", "reason", *(["source"] if several else [])]
    rows = [
        [f"  {r.row}", _printable(r.name), r.column or "(whole row)", repr(r.value), r.reason, *([r.source] * several)]
        for r in rejects[:MOST_LISTED]
    ]
    return table(header, rows) + _more(len(rejects) - MOST_LISTED, "cells")


def _printable(name: str) -> str:
    """A name, which may have been rejected for what it holds."""
    return name if name.isprintable() else repr(name)


def _more(count: int, what: str) -> list[str]:
    """What is left out of a list."""
    return [f"  and {count:,} more {what}; --json lists all, and a run keeps them in rejected.csv"] if count > 0 else []


def data(prepared: Prepared) -> dict[str, Any]:
    """The same, whole."""
    stages, parts = prepared.stages, prepared.parts
    return {
        **{
            name: {
                "source": t.source,
                "rows": t.rows,
                "used": t.used(),
                "columns": asdict(t.columns),
                "rejected_cells": by_reason(t.rejects),
            }
            for name, t in (("stages", stages), ("parts", parts))
        },
        "topologies": {group.topology.name: len(group.names) for group in stages.groups},
        "pairs": prepared.pairs(),
        "not_eligible": prepared.not_eligible(),
        "never_eligible": prepared.never_eligible(),
        "not_modelled": parts.not_modelled(stages.any_at_frequency()),
        "warnings": prepared.warnings(),
        "rejected": [asdict(reject) for reject in (*stages.rejects, *parts.rejects)],
    }
