"""The formulas of a topology: for a terminal, for LaTeX, for a browser, for a program, and as a page of all."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from html import escape
from typing import Any

import numpy as np

from gainassay.forms import coefficients, nodal, render
from gainassay.forms.cache import content_hash, form_of, formulas_of
from gainassay.forms.evaluation import ratios
from gainassay.forms.meaningful import Formulas, Stated
from gainassay.forms.multiaffine import MultiAffine
from gainassay.forms.topology import Topology, gain_unit
from gainassay.report.text import table

LONGEST_ON_PAGE = 1_000
"""Characters of a formula that the page of all topologies still shows."""


def _meaning(topology: Topology, formula: Stated) -> str:
    """What a formula is, with its unit."""
    is_gain = formula.symbol in ("G", "gain")
    unit = gain_unit(topology) if is_gain else "ohm" if formula.symbol.startswith("z_") else ""
    return f"{formula.meaning} [{unit}]" if unit else formula.meaning


def text(topology: Topology, formulas: Formulas, unicode: bool, width: int) -> list[str]:
    """All formulas, laid out on lines of a width."""
    lines = [f"{topology.name}: {topology.summary}"]
    if topology.known_as:
        lines.append(f"Known as: {', '.join(topology.known_as)}")
    lines += [f"{e.name} may be blank: {e.absent}" for e in topology.elements if e.absent != "error"]
    for formula in formulas.stated():
        start = f"  {formula.symbol} = "
        shown = render.lines(formula.expression, width - len(start), unicode)
        lines += ["", _meaning(topology, formula), start + shown[0], *(" " * len(start) + line for line in shown[1:])]
    return lines


def latex(topology: Topology, formulas: Formulas) -> list[str]:
    """The formulas as the lines of a LaTeX document's body (with amsmath)."""
    lines = []
    for formula in formulas.stated():
        symbol = render.latex_symbol(formula.symbol)
        lines += [f"% {_meaning(topology, formula)}", rf"\[ {symbol} = {render.latex(formula.expression)} \]"]
    return lines


def mathml(topology: Topology, formulas: Formulas) -> list[str]:
    """The formulas as a page that a browser shows."""
    title = escape(f"{topology.name}: {topology.summary}")
    lines = [
        "<!DOCTYPE html>",
        '<html lang="en">',
        f'<meta charset="utf-8"><title>{title}</title>',
        f"<h1>{title}</h1>",
    ]
    for formula in formulas.stated():
        lines += [
            f"<h2>{escape(formula.symbol)}: {escape(_meaning(topology, formula))}</h2>",
            render.mathml(formula.expression),
        ]
    return [*lines, "</html>"]


def data(topology: Topology, formulas: Formulas) -> dict[str, Any]:
    """Everything, for a program: trees, polynomials, hashes."""
    gain = nodal.derive(topology)
    symbols = [*gain.elements, *(f"{amplifier}.{symbol}" for amplifier, symbol in gain.departures)]

    def polynomial(found: MultiAffine) -> list[dict[str, Any]]:
        return [
            {"coefficient": value, "product": [name for i, name in enumerate(symbols) if mask >> i & 1]}
            for mask, value in found
        ]

    return {
        "topology": topology.name,
        "summary": topology.summary,
        "known_as": topology.known_as,
        "gain_unit": gain_unit(topology),
        "absent": {e.name: e.absent for e in topology.elements if e.absent != "error"},
        "formulas": [
            {
                "symbol": f.symbol,
                "meaning": _meaning(topology, f),
                "text": render.text(f.expression),
                "tree": render.tree(f.expression),
            }
            for f in formulas.stated()
        ],
        "proved": "equal to numerator/denominator as an identity of polynomials",
        "symbols": "an element stands for its admittance; u1.a for 1/A_OL, u1.g_id for 1/r_id, u1.r_o for r_o",
        "numerator": polynomial(gain.numerator),
        "denominator": polynomial(gain.denominator),
        "sha256": {"topology": topology.content_hash(), "form": content_hash(form_of(topology))},
    }


def numbers(topology: Topology, formulas: Formulas, values: Mapping[str, float], unicode: bool) -> list[str]:
    """The formulas with the value of each ratio in front, so that a person sees which ratio matters."""
    lines = [f"{topology.name}: {topology.summary}"]
    if topology.at_dc():
        lines.append(f"At 0 Hz: {', '.join(f'{name} is {state}' for name, state in topology.at_dc().items())}")
    for formula in formulas.stated():
        (whole, value), *inner = _ratios(formula, values, unicode)
        rows = [[f"  {_number(value)}", f"{formula.symbol} = {whole}"]]
        rows += [[f"  {_number(value)}", f"  {shown}"] for shown, value in inner]
        lines += ["", _meaning(topology, formula), *table(["", ""], rows)[1:]]
    return lines


def feedback_warnings(topology: Topology, absent: Mapping[str, str], values: Mapping[str, float]) -> list[str]:
    """A warning if the elements' values make the feedback positive at 0 Hz."""
    form = form_of(topology)
    blank = {"open": np.inf, "short": 0.0}
    ohms = np.array([[blank[absent[name]] if name in absent else values[name]] for name in form.elements])
    at = coefficients.evaluate(form, coefficients.at_dc(form, ohms))
    if coefficients.is_feedback_positive(form, at).any():
        return ["these values make the feedback positive: the output would run to its limit"]
    return []


def numbers_data(topology: Topology, formulas: Formulas, values: Mapping[str, float]) -> dict[str, Any]:
    """The same, for a program."""
    return {
        "topology": topology.name,
        "values": dict(values),
        "formulas": [
            {
                "symbol": formula.symbol,
                "meaning": _meaning(topology, formula),
                "ratios": [{"text": shown, "value": float(value)} for shown, value in _ratios(formula, values)],
            }
            for formula in formulas.stated()
        ],
    }


def _ratios(formula: Stated, values: Mapping[str, float], unicode: bool = False) -> list[tuple[str, Any]]:
    """Text and value of the formula and of each ratio in it; nan where ideal quantities leave it undefined."""
    with np.errstate(all="ignore"):
        scalars = {name: np.float64(value) for name, value in values.items()}
        return ratios(formula.expression, scalars, unicode=unicode)


def _number(value: float) -> str:
    return "-" if np.isnan(value) else f"{value + 0.0:.6g}"


def listing(topologies: Sequence[Topology]) -> list[str]:
    """Name and summary of each topology, and below them the columns of its elements."""
    lines = []
    for topology in topologies:
        columns = " ".join(e.name if e.absent == "error" else f"[{e.name}]" for e in topology.elements)
        lines += [f"{topology.name}: {topology.summary}", f"    {columns}"]
    return lines


def page(topologies: Sequence[Topology]) -> list[str]:
    """A page of Markdown with every topology, its elements and its formulas."""
    lines = [
        "# Topologies",
        "",
        "Made by `gainassay topologies --formulas`; do not edit. `||` is parallel; A, `r_id` and `r_o` are the",
        "op-amp's open-loop gain, differential input resistance and output resistance; s is the complex frequency.",
        "Every formula is proved equal to the solution of the nodal equations.",
    ]
    for topology in topologies:
        formulas = formulas_of(topology)
        lines += ["", f"## {topology.name}", "", f"{topology.summary}."]
        if topology.known_as:
            lines.append(f"Known as: {', '.join(topology.known_as)}.")
        blanks = [f"{e.name} ({e.absent})" for e in topology.elements if e.absent != "error"]
        if blanks:
            lines.append(f"May be blank: {', '.join(blanks)}.")
        lines += ["", "```text"]
        for formula in formulas.stated():
            shown = render.lines(formula.expression, 110)
            if len(render.text(formula.expression)) > LONGEST_ON_PAGE:
                shown = [f"(long: gainassay form {topology.name})"]
            start = f"{formula.symbol} = "
            lines += [start + shown[0], *(" " * len(start) + line for line in shown[1:])]
        lines.append("```")
    return lines
