"""Numbers and small tables as text for a terminal."""

from __future__ import annotations

import math
from collections.abc import Sequence
from decimal import ROUND_CEILING, ROUND_FLOOR, Context

PREFIXES = {-12: "p", -9: "n", -6: "u", -3: "m", 0: "", 3: "k", 6: "M", 9: "G", 12: "T"}
SMALLEST_PPM = 1e-12
"""Below this an error is shown as 0: it is rounding."""

DIGITS = 4
"""Of a number that is rounded to the safe side."""

ELEMENT_UNITS = {"resistor": "ohm", "capacitor": "F", "inductor": "H"}
PREFIXED = (*ELEMENT_UNITS.values(), "Hz")


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


def element(value: float, kind: str) -> str:
    """An element's value; 0 and infinity as what they are in the network.

    >>> [element(value, "resistor") for value in (4700, 47.5, 1e7, float("inf"), 0)]
    ['4.7 kohm', '47.5 ohm', '10 Mohm', 'open', 'short']
    >>> [element(value, "capacitor") for value in (2.2e-9, 0, float("inf"))]
    ['2.2 nF', 'open', 'short']
    """
    if value == 0.0 or math.isinf(value):
        return "open" if (value == 0.0) == (kind == "capacitor") else "short"
    return quantity(value, ELEMENT_UNITS[kind])


def quantity(value: float, unit: str) -> str:
    """A figure with its unit, the unit with a prefix where it takes one; a dash where nothing is known.

    >>> [quantity(3.5e5, "ohm"), quantity(3.5e5, "V/V"), quantity(float("nan"), "ohm")]
    ['350 kohm', '350000 V/V', '-']
    """
    if math.isnan(value):
        return "-"
    if math.isinf(value):
        return "infinite"
    if unit not in PREFIXED or value == 0.0:
        return f"{value:.6g} {unit}"
    power = min(max(3 * math.floor(math.log10(abs(value)) / 3), min(PREFIXES)), max(PREFIXES))
    return f"{value / 10.0**power:.6g} {PREFIXES[power]}{unit}"


def outward(value: float, up: bool) -> float:
    """A number rounded to four digits, up or down.

    >>> [outward(12345.0, True), outward(12345.0, False), outward(0.25, True)]
    [12350.0, 12340.0, 0.25]
    """
    return float(Context(DIGITS, ROUND_CEILING if up else ROUND_FLOOR).create_decimal_from_float(value))


def ppm(value: float) -> str:
    """An error in ppm, signed, three decimals aligned; what is smaller shows its power of ten.

    >>> [ppm(value) for value in (-1234567.891, 0.5, -0.00012345, 1e-13, 0.0, float("nan"))]
    ['-1,234,567.891', '+0.500', '-1.2e-04', '0', '0', 'no finite bound']
    """
    if math.isnan(value):
        return "no finite bound"
    if abs(value) < SMALLEST_PPM:
        return "0"
    return f"{value:+,.3f}" if abs(value) >= 0.001 else f"{value:+.1e}"


def percent_of(count: int, whole: int) -> str:
    """A share in per cent."""
    return f"{100 * count / whole:.1f} %" if whole else "-"
