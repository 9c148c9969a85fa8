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
WRITTEN_BY_USERS = ("stages", "parts")
"""The tables that go into a job; the others come out of it."""

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
    is_number : bool
        Whether its cells are numbers.
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
        Which letter code of IEC 60062 its cells may use: `resistance`, `capacitance`, `tolerance` or none.
    in_place_of : str
        The column whose number it gives in another unit, or nothing.
    """

    name: str
    is_number: bool
    unit: str
    meaning: str
    required: bool
    lowest: tuple[float, bool] | None
    highest: tuple[float, bool] | None
    nonzero: bool
    letter_code: str
    in_place_of: str

    def limits(self) -> str:
        """Its bounds in words, empty if it has none."""
        words = []
        if self.required:
            words.append("needed")
        if self.lowest:
            words.append(f"{'at least' if self.lowest[1] else 'above'} {self.lowest[0]:g}")
        if self.highest:
            words.append(f"{'at most' if self.highest[1] else 'below'} {self.highest[0]:g}")
        if self.nonzero:
            words.append("not 0")
        return ", ".join(words)

    def of(self, element: str) -> Column:
        """This column for one element."""
        return replace(self, name=_PLACEHOLDER.sub(element, self.name))


@cache
def columns(table: str) -> tuple[Column, ...]:
    """The columns of `schemas/<table>.table.json`, in its order."""
    return tuple(_column(field) for field in _document(table)["fields"])


def all_tables() -> list[str]:
    """The tables that `schemas/` describes, what a user writes first."""
    names = [path.name.removesuffix(".table.json") for path in resources.schemas().glob("*.table.json")]
    return sorted(names, key=lambda name: (name not in WRITTEN_BY_USERS, name))


def title(table: str) -> str:
    """A table's name in words."""
    return str(_document(table)["title"])


def description(table: str) -> str:
    """What the rows of a table are."""
    return str(_document(table)["description"])


def key(table: str) -> str:
    """The column that names the rows of a table."""
    return str(_document(table)["primaryKey"][0])


@cache
def _document(table: str) -> dict[str, Any]:
    found: dict[str, Any] = json.loads((resources.schemas() / f"{table}.table.json").read_text(encoding="utf-8"))
    return found


def column(table: str, name: str) -> Column:
    """One column of a table."""
    return next(column for column in columns(table) if column.name == name)


def undescribed(name: str, like: Column | None) -> Column:
    """A column that no schema knows, its numbers written as in another column if there is one."""
    written = {"unit": like.unit, "letter_code": like.letter_code} if like else {}
    return _column({"name": name, "type": "string", "description": "", **written})


def stage_columns(kinds: Mapping[str, str]) -> dict[str, Column]:
    """Every column that a stage table may have, by name, for elements of the given kinds.

    Parameters
    ----------
    kinds : Mapping[str, str]
        Kind of each element, by its name.
    """
    found: dict[str, Column] = {}
    for column in columns("stages"):
        placeholder = _PLACEHOLDER.search(column.name)
        wanted = placeholder.group()[1:-1] if placeholder else ""
        names = [name for name, kind in sorted(kinds.items()) if wanted in (kind, "element")] if wanted else [""]
        found |= {column.of(name).name: column.of(name) for name in names}
    return found


def reserved_stage_columns() -> frozenset[str]:
    """Names in the stage table that no element may bear."""
    return frozenset(column.name for column in columns("stages") if not _PLACEHOLDER.search(column.name))


def _column(field: dict[str, Any]) -> Column:
    constraints = field.get("constraints", {})
    return Column(
        name=field["name"],
        is_number=field["type"] != "string",
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
