"""A shortened formula, for a person or a program."""

from __future__ import annotations

from typing import Any

from gainassay.forms import render
from gainassay.forms.expression import Expression, length
from gainassay.report.text import table
from gainassay.shortened import ShortForm

LONGEST_PIECE = 50
"""Characters of a dropped piece, and of what it was dropped from, that are shown."""


def text(short: ShortForm, unicode: bool, width: int) -> list[str]:
    """The short formula, its verified deviation, and what was dropped."""
    found = short.found
    start = "  gain = "
    shown = render.lines(found.formula, width - len(start), unicode)
    lines = [f"{short.topology.name}: {short.topology.summary}"]
    at_dc = short.topology.at_dc()
    for name, state in short.absent.items():
        lines.append(f"{name} is {state} {'at 0 Hz' if name in at_dc else 'in all stages of the job'}")
    lines += ["", start + shown[0], *(" " * len(start) + line for line in shown[1:]), ""]
    lines.append(
        f"Verified over stages: {short.stages:,}, pairs: {short.pairs:,}; with nominal figures and with limits"
    )
    if short.parts_with_gaps:
        lines.append(f"  parts that lack a figure, which is taken as ideal: {short.parts_with_gaps:,}")
    lines += [
        f"  largest deviation {_share(found.deviation.share)} of the required accuracy, "
        f"at {short.stage} with {short.part}",
        f"  allowed {_share(short.within)}; length {length(found.formula)}, before {length(short.exact)}",
    ]
    if not found.dropped:
        return [*lines, "", "Nothing can be dropped: the formula is the exact one."]
    lines += [
        "",
        "Dropped, in this order: the largest deviation that each makes alone and together with those above it,",
        "as a share of the required accuracy",
    ]
    rows = [
        [f"  {_cut(d.piece, unicode)}", _cut(d.of, unicode), _share(d.alone.share), _share(d.together.share)]
        for d in found.dropped
    ]
    return [*lines, *table(["  piece", "of", "alone", "together"], rows, right=[2, 3])]


def _cut(expression: Expression, unicode: bool) -> str:
    shown = render.text(expression, unicode)
    return shown if len(shown) <= LONGEST_PIECE else f"{shown[:LONGEST_PIECE]}..."


def data(short: ShortForm) -> dict[str, Any]:
    """The same, for a program."""
    found = short.found
    return {
        "topology": short.topology.name,
        "absent": short.absent,
        "formula": {"text": render.text(found.formula), "tree": render.tree(found.formula)},
        "exact": {"text": render.text(short.exact), "tree": render.tree(short.exact)},
        "within": short.within,
        "verified_deviation": {"share": found.deviation.share, "stage": short.stage, "part": short.part},
        "stages": short.stages,
        "pairs": short.pairs,
        "parts_with_gaps": short.parts_with_gaps,
        "dropped": [
            {"piece": render.text(d.piece), "of": render.text(d.of), "share_alone": d.alone.share}
            for d in found.dropped
        ],
    }


def _share(value: float) -> str:
    return f"{100 * value:.3g} %"
