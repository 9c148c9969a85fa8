"""Checks that stage tables and part tables share."""

from __future__ import annotations

import json
import re
import unicodedata
from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from gainassay.contracts import tables
from gainassay.contracts.documents import nearest
from gainassay.contracts.quantities import Numbers, Writing, in_text, numbers, text_of
from gainassay.contracts.tables import Column
from gainassay.errors import InputError
from gainassay.job import Heading
from gainassay.tables import order
from gainassay.tables.raw import RawTable, is_number, joined, shown, starts_of
from gainassay.tables.rejects import PLACE, Reject, by_reason

LONGEST_NAME = 200
"""Characters of the name of a stage or part."""

UNSEEN = (
    r"(?P<mark>[\p{Cc}\p{Cf}\p{Zl}\p{Zp}\x{34f}\x{115f}\x{1160}\x{2800}\x{3164}\x{ffa0}"
    r"\x{fe00}-\x{fe0f}\x{e0100}-\x{e01ef}])"
)
"""Controls, marks of format and direction, fillers: two names that look the same may differ by them."""

TOTAL = "(?i)(?:grand |sub ?)?totals?:?|summe:?|gesamt:?"
"""What spreadsheets write below a table in the column of names."""

MOST_LISTED = 3
"""Other rows that a repeated name's reason lists."""

MOST_SHOWN = 5
"""Rejects, and reasons, that the message for a useless table shows."""


@dataclass
class Checking:
    """A table on its way from raw cells to checked arrays.

    Attributes
    ----------
    refused : dict[tuple[int, str], Reject]
        The rejects, by position and column: a cell is refused once, for the first reason.
    read : dict[Column, Numbers]
        Columns read so far.
    by_name : ndarray of int, shape (rows,)
        Positions by name, once the names are read.
    ordered : pyarrow.Array
        The names in that order.
    """

    raw: RawTable
    refused: dict[tuple[int, str], Reject] = field(default_factory=dict)
    by_name: NDArray[np.intp] = field(default_factory=lambda: np.array([], dtype=np.intp))
    ordered: pa.Array = field(default_factory=lambda: pa.array([], pa.string()))
    read: dict[Column, Numbers] = field(default_factory=dict)

    @staticmethod
    def of(raw: RawTable) -> Checking:
        """Start with a table as read."""
        return Checking(raw)

    @staticmethod
    def joined(parts: Sequence[Checking]) -> Checking:
        """Checks of some rows under those of others, as one."""
        tables = [part.raw for part in parts]
        found = Checking(joined(tables))
        for part, start in zip(parts, starts_of(tables), strict=True):
            found.refused |= {(start + at, column): reject for (at, column), reject in part.refused.items()}
        return found

    def only(self, columns: Collection[str]) -> Checking:
        """What was found, with the cells of some columns alone."""
        return Checking(self.raw.only(columns), self.refused)

    def refuse(self, position: int, column: str, reason: str) -> None:
        """Reject the row at `position` for its cell in `column` (several columns: joined by commas)."""
        self.refuse_all(column, {position: reason})

    def refuse_where(self, where: NDArray[np.bool_], column: str, reason: str) -> None:
        """Reject the rows where a mask holds, as `refuse` one."""
        self.refuse_all(column, dict.fromkeys(np.flatnonzero(where).tolist(), reason))

    def refuse_all(self, column: str, reasons: Mapping[int, str]) -> None:
        """Reject rows for their cells in `column` (several columns: joined by commas), each with its own reason."""
        if not reasons:
            return
        places = pa.array(reasons.keys(), pa.int64())
        cells = zip(*(self._shown(name, places) for name in column.split(", ")), strict=True)
        names = self._shown(self.raw.key, places)
        for (position, reason), values, name in zip(reasons.items(), cells, names, strict=True):
            self._add(position, column, reason, ", ".join(values), name)

    def _add(self, position: int, column: str, reason: str, value: str, name: str) -> None:
        if (position, column) not in self.refused:
            self.refused[position, column] = Reject(
                source=self.raw.file_of(position),
                row=int(self.raw.rows[position]),
                column=", ".join(map(self.raw.theirs, column.split(", "))),
                value=value,
                reason=reason,
                name=name.strip(),
            )

    def _shown(self, column: str, places: pa.Array) -> list[str]:
        """What stands in some cells of a column; nothing where the table has no such column."""
        if column not in self.raw.columns:
            return [""] * len(places)
        cells = self.raw.columns[column].take(places)
        values = (in_text(cells) if is_number(cells) else cells).to_pylist()
        return ["" if value is None else shown(str(value)) for value in values]

    def cell(self, column: str, position: int) -> str:
        """What stands in a cell; nothing where the table has no such column."""
        return self._shown(column, pa.array([position]))[0]

    def cells(self, column: str) -> pa.Array:
        """A column of text or numbers; cells that are no plain value are rejected.

        Raises
        ------
        InputError
            If it holds something else.
        """
        cells = self.raw.columns[column]
        if not pa.types.is_string(cells.type) and not is_number(cells):
            raise InputError(
                f"{self.raw.source}: column '{self.raw.theirs(column)}' holds {cells.type}, which is neither text nor "
                "number, or text that is not UTF-8; convert the column"
            )
        self.refuse_all(column, self.raw.flaws.get(column, {}))
        return cells

    def column(self, column: Column) -> Numbers:
        """A column's numbers, its refused cells rejected; all blank if the table does not have it."""
        count = len(self.raw.rows)
        if column.name not in self.raw.columns:
            return Numbers.nothing(count)
        if column not in self.read:
            heading = self.raw.headings.get(column.name)
            writing = Writing(heading.unit if heading else "", self.raw.decimal)
            self.read[column] = numbers(self.cells(column.name), column, writing)
            self.refuse_all(column.name, self.read[column].refused)
        return self.read[column]

    def names(self, column: str) -> pa.Array:
        """The names in a key column, as text; blank, unprintable and repeated names are rejected."""
        text = text_of(self.cells(column))
        for faults in _faults_of_names(text):
            self.refuse_all(column, faults)
        if len(text) and re.fullmatch(TOTAL, text[-1].as_py()):
            self.refuse(
                len(text) - 1, column, "names a total, and stands in the last row; remove the row, or rename it"
            )
        self.by_name = order.by_name(text)
        self.ordered = text.take(pa.array(self.by_name))
        for positions in order.repeated(self.ordered, self.by_name):
            rows = [int(self.raw.rows[position]) for position in positions]
            for place, row in zip(positions, rows, strict=True):
                others = [other for other in rows[: MOST_LISTED + 1] if other != row][:MOST_LISTED]
                self.refuse(
                    place,
                    column,
                    f"stands more than once: also in row {_listed(others, len(rows) - 1)}; which is meant?",
                )
        return text

    def good(self) -> NDArray[np.bool_]:
        """Rows without a reject."""
        mask = np.ones(len(self.raw.rows), dtype=bool)
        mask[[position for position, _ in self.refused]] = False
        return mask

    def in_order(self) -> tuple[NDArray[np.intp], NDArray[np.str_]]:
        """Positions of the rows without a reject, by their names, and these names; after `names`."""
        kept = self.good()[self.by_name]
        return self.by_name[kept], order.as_numpy(self.ordered.filter(pa.array(kept)))

    def found(self) -> tuple[Reject, ...]:
        """The rejects, in the order of the file."""
        return tuple(sorted([*self.raw.ragged, *self.refused.values()], key=PLACE))


def _faults_of_names(names: pa.Array) -> Iterator[dict[int, str]]:
    """Reasons for names that cannot be ones, by their positions; of several for one name the first counts."""
    yield dict.fromkeys(_places(pc.equal(names, "")), "is blank; each row needs a name")
    # The others need no second look, and most are among them.
    odd = _places(pc.invert(pc.ascii_is_printable(names)))
    marks = pc.extract_regex(names.take(pa.array(odd, pa.int64())), UNSEEN).field("mark").to_pylist()
    yield {place: _unseen(mark) for place, mark in zip(odd, marks, strict=True) if mark}
    too_long = pc.greater(pc.utf8_length(names), LONGEST_NAME)
    yield dict.fromkeys(_places(too_long), f"is longer than {LONGEST_NAME} characters; shorten the name")


def _unseen(mark: str) -> str:
    """Why a name that holds a mark which is not seen cannot be one."""
    if unicodedata.category(mark) == "Cc":
        return "holds a control character; use printable text"
    return f"holds a character that is not seen: U+{ord(mark):04X}; remove it"


def _places(where: pa.Array) -> list[int]:
    found: list[int] = np.flatnonzero(np.asarray(where)).tolist()
    return found


def _listed(rows: list[int], count: int) -> str:
    more = f" and {count - len(rows)} more" if count > len(rows) else ""
    return ", ".join(map(str, rows)) + more


@dataclass(frozen=True)
class ColumnUse:
    """What became of the columns of a table.

    Attributes
    ----------
    found : tuple[str, ...]
        Known columns that bear their own names.
    mapped : tuple[Heading, ...]
        What the job says of others.
    missing : tuple[str, ...]
        Known columns that are not there, those of elements apart.
    unknown : tuple[str, ...]
        Columns that nothing reads, with the nearest known name.
    """

    found: tuple[str, ...]
    mapped: tuple[Heading, ...]
    missing: tuple[str, ...]
    unknown: tuple[str, ...]


def column_use(raw: RawTable, table: str, known: Iterable[str]) -> ColumnUse:
    """What became of the columns of a table, of which the known ones are read."""
    names = set(known)
    return ColumnUse(
        found=tuple(name for name in raw.header if name in names and name not in raw.headings),
        mapped=tuple(raw.headings.values()),
        missing=tuple(c.name for c in tables.columns(table) if c.name in names and c.name not in raw.header),
        unknown=tuple(f"'{name}'{nearest(name, names)}" for name in raw.header if name not in names),
    )


def require_columns(raw: RawTable, table: str) -> None:
    """Raise if a column that each row must fill is missing.

    Raises
    ------
    InputError
        With the column, the nearest that is there, and a guess at what separates the cells if it is no comma.
    """
    for column in tables.columns(table):
        if column.required and column.name not in raw.header:
            hint = nearest(column.name, raw.header)
            only = raw.header[0] if len(raw.header) == 1 else ""
            for mark, name in ((";", "semicolons"), ("\t", "tabs"), ("|", "bars")):
                if mark in only:
                    hint = f"; its cells look separated by {name}: say delimiter = {json.dumps(mark)} in [{table}]"
            raise InputError(f"{raw.source}: the column '{column.name}' is missing{hint}")


def unknown_columns(raw: RawTable, known: Iterable[str]) -> tuple[str, ...]:
    """A warning for each column that nothing reads, with the nearest known name."""
    names = set(known)
    return tuple(
        f"{raw.source}: column '{name}' is not known and not read{nearest(name, names)}"
        for name in raw.header
        if name not in names
    )


def nothing_left(source: str, found: int, rejects: tuple[Reject, ...], kind: str) -> str:
    """The message for a table that holds no row that can be used."""
    if not found:
        return f"{source}: the table has no rows; it needs one for each {kind}"
    first = [f"  row {r.row}, {r.column or 'whole row'}: {r.value!r} {r.reason}" for r in rejects[:MOST_SHOWN]]
    more = len(rejects) - len(first)
    kinds = [f"  {count:,} x {reason}" for reason, count in by_reason(rejects).items()][:MOST_SHOWN]
    return "\n".join(
        [
            f"{source}: none of its {found} rows can be used:",
            *first,
            *([f"  and {more:,} more; the most frequent reasons:", *kinds] if more else []),
        ]
    )
