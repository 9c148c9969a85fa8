"""The columns of every table, as the Table Schema files under schemas/ state them."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cache
from typing import Any

from gainassay import resources

ELEMENT = "<element>"
"""Stands in a column's name for any element of the stage's topology."""

NETWORK = "<network>"
"""Stands in a column's name for any network of resistors that a stage names."""

_PLACEHOLDER = re.compile("<[a-z]+>")

ELEMENT_SUFFIXES = ("_tol_pct", "_tc_ppm_k", "_drift_pct", "_network")
"""What may follow an element's name in a column of the stage table."""


@dataclass(frozen=True)
class Column:
    """A column of a table.

    Attributes
    ----------
    name : str
        Its name; may hold a placeholder such as `<element>` or `<resistor>`.
    unit : str
        Unit, empty for text and counts.
    meaning : str
        What it says, in a line.
    required : bool
        Whether each row must fill it.
    lowest, highest : tuple[float, bool] or None
        Bound, and whether the bound itself is allowed.
    nonzero : bool
        Whether zero is refused.
    letter_code : str
        Which letter code of IEC 60062 its cells may use: `resistance`, `capacitance` or none.
    in_place_of : str
        The column whose number it gives in another unit, or nothing.
    """

    name: str
    unit: str
    meaning: str
    required: bool
    lowest: tuple[float, bool] | None
    highest: tuple[float, bool] | None
    nonzero: bool
    letter_code: str
    in_place_of: str

    def of(self, element: str) -> Column:
        """This column for one element."""
        return replace(self, name=_PLACEHOLDER.sub(element, self.name))


@cache
def columns(table: str) -> tuple[Column, ...]:
    """The columns of `schemas/<table>.table.json`, in its order."""
    document = json.loads((resources.schemas() / f"{table}.table.json").read_text(encoding="utf-8"))
    return tuple(_column(field) for field in document["fields"])


def column(table: str, name: str) -> Column:
    """One column of a table."""
    return next(column for column in columns(table) if column.name == name)


def undescribed(name: str, like: Column | None) -> Column:
    """A column that no schema knows, its numbers written as in another column if there is one."""
    written = {"unit": like.unit, "letter_code": like.letter_code} if like else {}
    return _column({"name": name, "description": "", **written})


def stage_columns(kinds: Mapping[str, str]) -> dict[str, Column]:
    """The columns that a stage table may have, by name, for elements of these kinds."""
    of_elements = [
        column("stages", template).of(element)
        for element, kind in sorted(kinds.items())
        for template in (f"<{kind}>", *(ELEMENT + suffix for suffix in ELEMENT_SUFFIXES))
    ]
    general = [column("stages", name) for name in sorted(reserved_stage_columns())]
    return {found.name: found for found in (*general, *of_elements)}


def reserved_stage_columns() -> frozenset[str]:
    """Names in the stage table that no element may bear."""
    return frozenset(column.name for column in columns("stages") if not _PLACEHOLDER.search(column.name))


def _column(field: dict[str, Any]) -> Column:
    constraints = field.get("constraints", {})
    return Column(
        name=field["name"],
        unit=field.get("unit", ""),
        meaning=field["description"],
        required=constraints.get("required", False),
        lowest=_bound(constraints, "minimum", "exclusiveMinimum"),
        highest=_bound(constraints, "maximum", "exclusiveMaximum"),
        nonzero=field.get("nonzero", False),
        letter_code=field.get("letter_code", ""),
        in_place_of=field.get("in_place_of", ""),
    )


def _bound(constraints: dict[str, Any], inclusive: str, exclusive: str) -> tuple[float, bool] | None:
    if inclusive in constraints:
        return float(constraints[inclusive]), True
    if exclusive in constraints:
        return float(constraints[exclusive]), False
    return None
