"""What stages ask of a part, for a person."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from typing import Any

import pyarrow as pa

from gainassay.cautions import CAUTIONS
from gainassay.forms.departures import DEPARTURES, OPEN_LOOP_GAIN, Departure
from gainassay.report.text import outward, quantity, table
from gainassay.specification import OUTLOOKS

Row = Mapping[str, Any]

LEGEND = (
    "floor: the least open-loop gain, however good the rest; at least, at most: beside the best part's other limits;",
    "has: what that part's worst case takes; any: even the poorest looked for passes; none: none is good enough",
)

MEANINGS = {
    "met": "a part passes",
    "unproven": "parts are inside the limit, but only by leaning on numbers that prove nothing",
    "unmet": "no part of the table is inside the limit",
    "hopeless": "no part can be",
}
"""Of the outlooks, in a few words."""

SLACK = 1e-9
"""Of a tenth of a dB: a gain of 80 dB is no more than that."""


def text(found: pa.Table) -> list[str]:
    """A need table: how many stages stand how, the specification lines, and the stages that no part can pass."""
    rows = found.to_pylist()
    groups = {outlook: [row for row in rows if row["outlook"] == outlook] for outlook in OUTLOOKS}
    others = [row for row in rows if row["outlook"] != "hopeless" and not _is_left_out(row)]
    calibrated = [row for row in rows if row["calibrated"]]
    tuned = [row for row in rows if row["at_frequency"]]
    stands = [[outlook, f"{len(groups[outlook]):,}", MEANINGS[outlook]] for outlook in OUTLOOKS]
    lines = table(["", "", ""], stands, right=[1])[1:]
    if others:
        lines += ["", "What a part must meet, rounded to the safe side; each number was put back and passes"]
        lines += _specification(others)
        lines += ["", *LEGEND]
    if calibrated:
        lines += ["", "Calibrated, so that needs are not found: what counts is how a part changes"]
        lines += [f"  {row['stage']}: {row['outlook']}, best with {row['part'] or 'no part'}" for row in calibrated]
    if tuned:
        lines += ["", "At a frequency, where needs are not found"]
        lines += [f"  {row['stage']}: {row['outlook']}, best with {row['part'] or 'no part'}" for row in tuned]
    if unmet := [row for row in groups["unmet"] if not _is_left_out(row)]:
        lines += ["", "No part of the table is inside the limit"]
        lines += [f"  {row['stage']}: {_with_part(row)}" for row in unmet]
    if groups["hopeless"]:
        lines += ["", "No part can pass"]
        lines += [f"  {row['stage']}: {_hopeless(row)}" for row in groups["hopeless"]]
    return [*lines, "", *CAUTIONS]


def _specification(rows: list[Row]) -> list[str]:
    header = ["  stage", "outlook", f"floor of {OPEN_LOOP_GAIN.quantity}", "best part"]
    for departure in _asked(rows[0]):
        header += [f"{departure.quantity} at {'least' if departure.reciprocal else 'most'}", "has"]
    return table(header, [list(_line(row)) for row in rows])


def _asked(row: Row) -> list[Departure]:
    """The departures whose figures a row speaks of."""
    return [departure for departure in DEPARTURES if f"need_{departure.quantity}" in row]


def _line(row: Row) -> Iterator[str]:
    yield f"  {row['stage']}"
    yield row["outlook"]
    yield _needed(OPEN_LOOP_GAIN, row["floor_a_ol"])
    yield row["part"] or "-"
    for departure in _asked(row):
        has = row[f"has_{departure.quantity}"]
        yield _needed(departure, row[f"need_{departure.quantity}"]) if row["part"] else "-"
        yield "-" if has is None else _figure(departure, has)


def _needed(departure: Departure, value: float | None) -> str:
    """A figure that is needed, rounded so that it still passes."""
    if value is None:
        return "none"
    if value <= departure.poorest if departure.reciprocal else value >= departure.poorest:
        return "any"
    return _figure(departure, outward(value, departure.reciprocal))


def _figure(departure: Departure, value: float) -> str:
    if departure is not OPEN_LOOP_GAIN:
        return quantity(value, departure.unit)
    shown = f"{value:,.0f}" if value >= 1000.0 else f"{value:.4g}"
    return f"{shown} ({math.ceil(200.0 * math.log10(value) - SLACK) / 10.0:.1f} dB)"


def _hopeless(row: Row) -> str:
    if row["excess_ppm"] is None:
        return f"at a corner of its tolerances the gain has no bound: no part can pass; {_remedy(row)}"
    limit = "the limit" if row["allowed_ppm"] == row["limit_ppm"] else "the limit, less its guard band,"
    return f"resistors alone exceed {limit} by {row['excess_ppm']:,.4g} ppm: no part can pass; {_remedy(row)}"


def _remedy(row: Row) -> str:
    if row["tolerance_ideal_pct"] is None:
        return "even exact ones do: its target gain is too far from its ideal gain"
    if row["tolerance_part_pct"] is None:
        return f"{_in_place(row, 'tolerance_ideal_pct')} would do with an ideal op-amp"
    return _with_part(row)


def _with_part(row: Row) -> str:
    if not row["part"]:
        return "no part is eligible, or none has a finite bound"
    if row["tolerance_part_pct"] is None:
        return f"no tolerance would do with {row['part']}"
    return f"{_in_place(row, 'tolerance_part_pct')} would do with {row['part']}"


def _in_place(row: Row, column: str) -> str:
    return f"resistors within {outward(row[column], False):g} % in place of {row['tolerance_pct']:.6g} %"


def _is_left_out(row: Row) -> bool:
    """Whether needs are not found for the stage."""
    return bool(row["calibrated"] or row["at_frequency"])
