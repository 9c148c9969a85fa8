"""A run's summaries: a row for each stage and for each part."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa

from gainassay.contracts.limits import LIMITS
from gainassay.runs.tables import PPM, summary_table
from gainassay.screen.blocks import Group, Tally
from gainassay.screen.verdicts import VERDICTS


@dataclass(frozen=True)
class Counts:
    """Pairs of a run.

    Attributes
    ----------
    verdicts, dominant_terms : dict[str, int]
        Pairs by verdict; pairs by dominant term, the most frequent first.
    limits : dict[str, dict[str, int]]
        Of each operating limit the pairs outside it, and the pairs of which it was not checked.
    """

    verdicts: dict[str, int]
    dominant_terms: dict[str, int]
    limits: dict[str, dict[str, int]]


def counts(groups: Sequence[Group], tallies: Sequence[Tally]) -> Counts:
    """Pairs by verdict and by dominant term."""
    verdicts = sum((tally.by_stage.sum(axis=0) for tally in tallies), np.zeros(len(VERDICTS), np.int64))
    dominant: dict[str, int] = {}
    for tally in tallies:
        for name, count in zip(groups[tally.chunk.group].dominant_names(), tally.dominant.tolist(), strict=True):
            dominant[name] = dominant.get(name, 0) + count
    common = sorted(((name, count) for name, count in dominant.items() if count), key=lambda item: (-item[1], item[0]))
    return Counts(dict(zip(VERDICTS, verdicts.tolist(), strict=True)), dict(common), _limits(tallies))


def _limits(tallies: Sequence[Tally]) -> dict[str, dict[str, int]]:
    return {
        limit.name: {
            "outside": sum(int(tally.outside[place]) for tally in tallies),
            "not_checked": sum(int(tally.unchecked[place]) for tally in tallies),
        }
        for place, limit in enumerate(LIMITS)
    }


def stage_summary(groups: Sequence[Group], tallies: Sequence[Tally]) -> pa.Table:
    """A row for each stage, ordered by name."""
    rows: dict[str, dict[str, Any]] = {}
    for tally in tallies:
        group = groups[tally.chunk.group]
        for index, name in enumerate(group.stage_names[tally.chunk.stages].tolist()):
            best = int(tally.best_part[index])
            rank = (int(tally.best_rank[index]), float(np.nan_to_num(tally.best_limit_used[index], nan=np.inf)))
            row = rows.setdefault(
                name,
                {
                    "topology": group.form.topology,
                    "gain_ideal": float(tally.gain_ideal[index]),
                    "limit_ppm": float(tally.limits[index] * PPM),
                    "error_elements_ppm": float(tally.elements_error[index] * PPM),
                    "verdicts": np.zeros(len(VERDICTS), np.int64),
                    "rank": (len(VERDICTS), np.inf),
                    "best": "",
                },
            )
            row["verdicts"] += tally.by_stage[index]
            if best >= 0 and rank < row["rank"]:
                row["rank"], row["best"] = rank, str(group.part_names[best])
    names = sorted(rows)
    ordered = [rows[name] for name in names]
    used = np.array([row["rank"][1] for row in ordered])
    errors = np.array([row["error_elements_ppm"] for row in ordered])
    return summary_table(
        "stage_summary",
        {
            "stage": pa.array(names, pa.string()),
            "topology": pa.array([row["topology"] for row in ordered], pa.string()),
            "gain_ideal": pa.array([row["gain_ideal"] for row in ordered], pa.float64()),
            "limit_ppm": pa.array([row["limit_ppm"] for row in ordered], pa.float64()),
            "error_elements_ppm": pa.array(errors, mask=~np.isfinite(errors)),
            **_verdict_columns(np.array([row["verdicts"] for row in ordered]), len(groups[0].part_names)),
            "best_part": pa.array([row["best"] for row in ordered], pa.string()),
            "best_limit_used": pa.array(used, mask=~np.isfinite(used)),
        },
    )


def part_summary(groups: Sequence[Group], tallies: Sequence[Tally]) -> pa.Table:
    """A row for each part, ordered by name."""
    names = groups[0].part_names
    counts = np.zeros((len(names), len(VERDICTS)), np.int64)
    for tally in tallies:
        counts[tally.chunk.parts] += tally.by_part
    stages = sum(len(group.stage_names) for group in groups)
    return summary_table(
        "part_summary", {"part": pa.array(names.tolist(), pa.string()), **_verdict_columns(counts, stages)}
    )


def _verdict_columns(counts: np.ndarray[Any, np.dtype[np.int64]], partners: int) -> dict[str, pa.Array]:
    """Pairs by verdict, and those of all partners that are not eligible and so have none."""
    of_verdicts = {verdict: pa.array(counts[:, code]) for code, verdict in enumerate(VERDICTS)}
    return {**of_verdicts, "not_eligible": pa.array(partners - counts.sum(axis=1))}
