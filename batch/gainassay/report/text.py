"""Numbers and small tables as text for a terminal."""

from __future__ import annotations

import math
from collections.abc import Sequence

LETTERS = ((1e12, "T"), (1e9, "G"), (1e6, "M"), (1e3, "k"))


def table(header: Sequence[str], rows: Sequence[Sequence[str]], right: Sequence[int] = ()) -> list[str]:
    """Lines of a table: columns padded to their widest cell, those in `right` aligned to the right.

    >>> table(["part", "pass"], [["amp-1", "12"], ["amp-22", "3"]], right=[1])
    ['part    pass', 'amp-1     12', 'amp-22     3']
    """
    widths = [max(len(row[i]) for row in [header, *rows]) for i in range(len(header))]
    lines = []
    for row in [header, *rows]:
        cells = [
            cell.rjust(width) if i in right else cell.ljust(width)
            for i, (cell, width) in enumerate(zip(row, widths, strict=True))
        ]
        lines.append("  ".join(cells).rstrip())
    return lines


def ohms(value: float) -> str:
    """A resistance.

    >>> [ohms(value) for value in (4700, 47.5, 1e7, float("inf"), 0)]
    ['4.7 kohm', '47.5 ohm', '10 Mohm', 'open', 'short']
    """
    if math.isinf(value):
        return "open"
    if value == 0.0:
        return "short"
    for factor, letter in LETTERS:
        if value >= factor:
            return f"{value / factor:.6g} {letter}ohm"
    return f"{value:.6g} ohm"


def quantity(value: float, unit: str) -> str:
    """A data-sheet figure with its unit; a dash where nothing is known."""
    if math.isnan(value):
        return "-"
    if unit == "ohm":
        return ohms(value) if value else "0 ohm"
    return f"{value:.6g} {unit}"


def ppm(value: float) -> str:
    """An error in ppm, signed, to four significant digits at least.

    >>> [ppm(value) for value in (-1234.56, 0.00012345, 0.0, float("nan"))]
    ['-1234.56', '+0.0001234', '0', 'no finite bound']
    """
    if math.isnan(value):
        return "no finite bound"
    if value == 0.0:
        return "0"
    return f"{value:+.2f}" if abs(value) >= 100 else f"{value:+.4g}"


def percent_of(count: int, whole: int) -> str:
    """A share in per cent."""
    return f"{100 * count / whole:.1f} %" if whole else "-"
