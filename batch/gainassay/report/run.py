"""The end of a run, and lists of runs, for a person."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from gainassay.report import eligible
from gainassay.report.text import percent_of, table

MOST_LISTED = 8


def summary(manifest: Mapping[str, Any], folder: Path, hopeless: Sequence[str]) -> list[str]:
    """What a run found, where it lies, and how long it took."""
    pairs, verdicts, inputs = manifest["pairs"], manifest["verdicts"], manifest["inputs"]
    rows = [["pairs", f"{pairs:,}", ""]]
    rows += [[verdict, f"{count:,}", percent_of(count, pairs)] for verdict, count in verdicts.items()]
    lines = table(["", "", ""], rows, right=[1, 2])[1:]
    lines += eligible.text(pairs, manifest["not_eligible"], manifest["never_eligible"])
    lines += ["", "Most common dominant terms"]
    common = list(manifest["dominant_terms"].items())[:MOST_LISTED]
    lines += table(
        ["", "", ""], [[f"  {name}", f"{count:,}", percent_of(count, pairs)] for name, count in common], right=[1, 2]
    )[1:]
    lines += ["", f"Stages that no part passes: {len(hopeless):,}"]
    lines += [f"  {name}" for name in hopeless[:MOST_LISTED]]
    if len(hopeless) > MOST_LISTED:
        lines.append(f"  and {len(hopeless) - MOST_LISTED:,} more: those with pass = 0 in {folder / 'stages.parquet'}")
    lines += _limits(manifest["limits"], pairs)
    lines += ["", "Tables"]
    lines += table(
        ["", "", "", "", ""],
        [
            [f"  {name}", f"{t['rows']:,} rows", f"{t['used']:,} used", f"{t['rejected']:,} rejected", t["source"]]
            for name, t in inputs.items()
        ],
        right=[1, 2, 3],
    )[1:]
    if any(t["rejected"] for t in inputs.values()):
        lines.append(f"  each rejected cell with its reason: {folder / 'rejected.csv'}")
    if manifest["not_modelled"]:
        lines.append(f"  not modelled, for want of a column: {', '.join(manifest['not_modelled'])}")
    lines += ["", f"Results: {folder}", f"Time:    {manifest['seconds']:.1f} s", "", *manifest["cautions"]]
    return lines


def _limits(limits: Mapping[str, Mapping[str, int]], pairs: int) -> list[str]:
    """The operating limits: of how many pairs each was checked and how many are outside."""
    checked = {name: pairs - counts["not_checked"] for name, counts in limits.items()}
    rows = [
        [f"  {name}", f"{counts['outside']:,} outside", f"{counts['not_checked']:,} not checked"]
        for name, counts in limits.items()
        if checked[name]
    ]
    lines = ["", "Operating limits", *table(["", "", ""], rows, right=[1, 2])[1:]]
    never = [name for name in limits if not checked[name]]
    return [*lines, f"  not checked at all, for want of columns or numbers: {', '.join(never)}"] if never else lines


def runs(manifests: Sequence[Mapping[str, Any]]) -> list[str]:
    """A line for each run, oldest first."""
    rows = [
        [
            m["run"],
            m["started"],
            f"{m['pairs']:,}",
            *(f"{m['verdicts'][verdict]:,}" for verdict in ("pass", "fail", "unproven")),
            f"{sum(t['rejected'] for t in m['inputs'].values()):,}",
        ]
        for m in manifests
    ]
    header = ["run", "started", "pairs", "pass", "fail", "unproven", "rejected rows"]
    return table(header, rows, right=[2, 3, 4, 5, 6])
