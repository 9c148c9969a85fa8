"""Checks that stage tables and part tables share."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from gainassay.contracts import tables
from gainassay.contracts.documents import nearest
from gainassay.contracts.quantities import Numbers, numbers, text_of
from gainassay.contracts.tables import Column
from gainassay.errors import InputError
from gainassay.tables.rejects import Reject, Rejects
from gainassay.tables.sources import RawTable, is_number, shown

LONGEST_NAME = 200
"""Characters of the name of a stage or part."""

MOST_LISTED = 3
"""Other rows that a repeated name's reason lists."""


@dataclass
class Checking:
    """A table on its way from raw cells to checked arrays.

    Attributes
    ----------
    read : dict[Column, Numbers]
        Columns read so far: each is read, and its bad cells rejected, once.
    """

    raw: RawTable
    rejects: Rejects
    read: dict[Column, Numbers] = field(default_factory=dict)

    @staticmethod
    def of(raw: RawTable) -> Checking:
        """Start with a table as read; its ragged rows are rejected already."""
        return Checking(raw, Rejects(raw.source, found=list(raw.ragged)))

    def refuse(self, position: int, column: str, reason: str) -> None:
        """Reject the row at `position` for its cell in `column` (several columns: joined by commas)."""
        value = ", ".join(self.cell(name, position) for name in column.split(", "))
        self.rejects.add(position, int(self.raw.rows[position]), column, value, reason)

    def cell(self, column: str, position: int) -> str:
        """What stands in a cell; nothing where the table has no such column."""
        if column not in self.raw.columns:
            return ""
        value = self.raw.columns[column][position].as_py()
        return "" if value is None else shown(str(value))

    def cells(self, column: str) -> pa.Array:
        """A column of text or numbers.

        Raises
        ------
        InputError
            If it holds something else.
        """
        cells = self.raw.columns[column]
        if not pa.types.is_string(cells.type) and not is_number(cells):
            raise InputError(
                f"{self.raw.source}: column '{column}' holds {cells.type}, which is neither text nor number, "
                "or text that is not UTF-8; convert the column"
            )
        return cells

    def column(self, column: Column) -> Numbers:
        """A column's numbers, its refused cells rejected; all blank if the table does not have it."""
        count = len(self.raw.rows)
        if column.name not in self.raw.columns:
            return Numbers(np.full(count, np.nan), np.ones(count, dtype=bool), {})
        if column not in self.read:
            self.read[column] = numbers(self.cells(column.name), column)
            for position, reason in self.read[column].refused.items():
                self.refuse(position, column.name, reason)
        return self.read[column]

    def names(self, column: str) -> NDArray[np.object_]:
        """The names in a key column; blank, unprintable and repeated names are rejected."""
        text = text_of(self.cells(column))
        names = np.array(text.to_pylist(), dtype=object)
        for position in np.flatnonzero(names == ""):
            self.refuse(int(position), column, "is blank; each row needs a name")
        for position in np.flatnonzero(np.asarray(pc.match_substring_regex(text, r"\p{Cc}"))):
            self.refuse(int(position), column, "holds a control character; use printable text")
        for position in np.flatnonzero(np.asarray(pc.greater(pc.utf8_length(text), LONGEST_NAME))):
            self.refuse(int(position), column, f"is longer than {LONGEST_NAME} characters; shorten the name")
        for name, positions in _repeated(names).items():
            rows = [int(self.raw.rows[position]) for position in positions]
            for place, row in zip(positions, rows, strict=True):
                others = [str(other) for other in rows[: MOST_LISTED + 1] if other != row][:MOST_LISTED]
                listed = ", ".join(others) + (", ..." if len(rows) > MOST_LISTED + 1 else "")
                if name:
                    self.refuse(place, column, f"stands more than once: also in row {listed}; which is meant?")
        return names

    def rejected_names(self, names: NDArray[np.object_]) -> dict[str, int]:
        """Row in the file of each name that was rejected."""
        return {names[position]: int(self.raw.rows[position]) for position in sorted(self.rejects.positions)}

    def good(self) -> NDArray[np.bool_]:
        """Rows without a reject."""
        mask = np.ones(len(self.raw.rows), dtype=bool)
        mask[list(self.rejects.positions)] = False
        return mask

    def found(self) -> tuple[Reject, ...]:
        """The rejects, in the order of the file."""
        return tuple(sorted(self.rejects.found))


def _repeated(names: NDArray[np.object_]) -> dict[str, list[int]]:
    """Positions of each name that stands more than once."""
    places: dict[str, list[int]] = {}
    for position, name in enumerate(names):
        places.setdefault(name, []).append(position)
    return {name: positions for name, positions in places.items() if len(positions) > 1}


def require_columns(raw: RawTable, table: str) -> None:
    """Raise if a column that each row must fill is missing.

    Raises
    ------
    InputError
        With the column, the nearest that is there, and a guess at what separates the cells if it is no comma.
    """
    for column in tables.columns(table):
        if column.required and column.name not in raw.columns:
            hint = nearest(column.name, raw.columns)
            only = next(iter(raw.columns)) if len(raw.columns) == 1 else ""
            for mark, name in ((";", "semicolons"), ("\t", "tabs"), ("|", "bars")):
                if mark in only:
                    hint = f"; its cells look separated by {name}: save it with commas, and points in numbers"
            raise InputError(f"{raw.source}: the column '{column.name}' is missing{hint}")


def unknown_columns(raw: RawTable, known: Iterable[str]) -> tuple[str, ...]:
    """A warning for each column that nothing reads, with the nearest known name."""
    names = set(known)
    return tuple(
        f"{raw.source}: column '{name}' is not known and not read{nearest(name, names)}"
        for name in raw.columns
        if name not in names
    )


def nothing_left(path: Path, found: int, rejects: tuple[Reject, ...], kind: str) -> str:
    """The message for a table that holds no row that can be used."""
    if not found:
        return f"{path}: the table has no rows; it needs one for each {kind}"
    listed = [f"  row {r.row}, {r.column or 'whole row'}: {r.value!r} {r.reason}" for r in rejects[:5]] + (
        ["  ..."] if len(rejects) > 5 else []
    )
    return "\n".join([f"{path}: none of its {found} rows can be used:", *listed])
