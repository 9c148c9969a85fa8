"""A shortened formula, for a person or a program."""

from __future__ import annotations

from typing import Any

from gainassay.forms import render
from gainassay.forms.expression import length
from gainassay.report.text import table
from gainassay.shortened import ShortForm


def text(short: ShortForm, unicode: bool, width: int) -> list[str]:
    """The short formula, its verified deviation, and what was dropped."""
    found = short.found
    start = "  gain = "
    shown = render.lines(found.formula, width - len(start), unicode)
    lines = [f"{short.topology.name}: {short.topology.summary}"]
    lines += [f"{name} is {state} in all stages of the job" for name, state in short.absent.items()]
    lines += ["", start + shown[0], *(" " * len(start) + line for line in shown[1:]), ""]
    lines += [
        f"Verified over {short.stages:,} stages, {short.pairs:,} pairs, with nominal figures and with limits:",
        f"  largest deviation {_share(found.deviation.share)} of the required accuracy, "
        f"at {short.stage} with {short.part}",
        f"  allowed {_share(short.within)}; length {length(found.formula)}, before {length(short.exact)}",
    ]
    if found.dropped:
        lines += ["", "Dropped, with the largest deviation that each alone makes, as a share of the required accuracy"]
        lines += table(
            ["  piece", "of", "share"],
            [
                [f"  {render.text(piece.piece, unicode)}", render.text(piece.of, unicode), _share(piece.alone.share)]
                for piece in found.dropped
            ],
            right=[2],
        )
    return lines


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
        "dropped": [
            {"piece": render.text(d.piece), "of": render.text(d.of), "share_alone": d.alone.share}
            for d in found.dropped
        ],
    }


def _share(value: float) -> str:
    return f"{100 * value:.3g} %"
