"""Tables as they stand in their sources: cells, and for each row the place where a person would look for it."""

from __future__ import annotations

import hashlib
from bisect import bisect_right
from collections.abc import Collection, Iterable, Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass, field, replace
from itertools import accumulate
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from gainassay.contracts.quantities import in_text
from gainassay.errors import InputError
from gainassay.job import Heading
from gainassay.tables.rejects import Reject

LONGEST_SHOWN = 200
"""Characters of a cell that a reject repeats."""

Flaws = Mapping[str, Mapping[int, str]]
"""By column and position: what is wrong with a cell whatever its text says, such as a formula of a spreadsheet."""


@dataclass(frozen=True)
class Piece:
    """Some rows of a file, sheet or query's result, as they stand; all of one have the same columns.

    Attributes
    ----------
    source : str
        What messages call it.
    columns : dict[str, pyarrow.Array]
        Cells: strings, or numbers where the source holds numbers; of another type only what cannot be text.
    rows : ndarray of int, shape (rows,)
        Row in the file: a CSV's header is row 1, as a spreadsheet counts; the first of a Parquet file or of a
        query's result is 1.
    sha256 : str
        Hash of all that was read, in one of the pieces; empty in the others.
    ragged : tuple[Reject, ...]
        Rows of a CSV file whose number of cells is not the header's.
    """

    source: str
    columns: dict[str, pa.Array]
    rows: NDArray[np.int64]
    sha256: str = ""
    ragged: tuple[Reject, ...] = ()
    flaws: Flaws = field(default_factory=dict)

    def without_blank_rows(self) -> Piece:
        """The rows in which something stands."""
        kept = filled(self.columns, len(self.rows))
        if kept.all():
            return self
        moved = np.cumsum(kept) - 1
        return Piece(
            self.source,
            {name: cells.filter(pa.array(kept)) for name, cells in self.columns.items()},
            self.rows[kept],
            self.sha256,
            self.ragged,
            {name: {int(moved[at]): why for at, why in flaws.items()} for name, flaws in self.flaws.items()},
        )


@dataclass(frozen=True)
class RawTable:
    """A table or some rows of one as they stand in its source, its columns by the names that the job gives them.

    Attributes
    ----------
    source : str
        What messages call it.
    key : str
        The column that names its rows.
    header : tuple[str, ...]
        All columns.
    columns : dict[str, pyarrow.Array]
        Cells, as in `Piece`; of columns that are done with, none.
    rows : ndarray of int, shape (rows,)
        Row of each in its file, as in `Piece`.
    files : tuple[str, ...]
        What messages call the file of a row, by the piece's place.
    starts : tuple[int, ...]
        Position of the first row of each piece.
    sha256 : str
        Hash of what was read; of some rows, as in `Piece`.
    headings : Mapping[str, Heading]
        What the job says of a column, for those of which it says something.
    decimal : str
        The decimal sign of numbers in text.
    """

    source: str
    key: str
    header: tuple[str, ...]
    columns: dict[str, pa.Array]
    rows: NDArray[np.int64]
    files: tuple[str, ...]
    starts: tuple[int, ...]
    ragged: tuple[Reject, ...]
    sha256: str
    flaws: Flaws
    headings: Mapping[str, Heading]
    decimal: str

    def file_of(self, position: int) -> str:
        """What messages call the file of a row."""
        return self.files[bisect_right(self.starts, position) - 1]

    def only(self, columns: Collection[str]) -> RawTable:
        """The table with the cells of some columns alone."""
        return replace(self, columns={name: self.columns[name] for name in self.header if name in columns})

    def theirs(self, column: str) -> str:
        """What the user calls a column."""
        heading = self.headings.get(column)
        return heading.theirs if heading and heading.value is None else column


def shown(text: str) -> str:
    """A cell as a reject repeats it."""
    return text if len(text) <= LONGEST_SHOWN else f"{text[:LONGEST_SHOWN]}... ({len(text)} characters)"


def is_number(cells: pa.Array) -> bool:
    """Whether a column holds numbers, not text."""
    return bool(pa.types.is_floating(cells.type) or pa.types.is_integer(cells.type))


def plain_type(cells: pa.Array) -> pa.Array:
    """Numbers as they are, what can be text as text; the rest as it is, for whoever reads it to refuse."""
    if is_number(cells):
        return cells
    try:
        text = cells.cast(pa.string())
        text.validate(full=True)
    except pa.ArrowException:
        # Text that is not UTF-8 must not pass for text.
        return cells.cast(pa.binary()) if pa.types.is_string(cells.type) else cells
    return text


def array_of(values: Sequence[Any]) -> pa.Array:
    """A column of Python's values: numbers if all are, else text, a number as its shortest."""
    kinds = set(map(type, values)) - {type(None)}
    if kinds == {int}:
        with suppress(OverflowError, pa.ArrowInvalid):
            return pa.array(values, pa.int64())
    if kinds and kinds <= {int, float}:
        return pa.array(values if kinds == {float} else [value and float(value) for value in values], pa.float64())
    if kinds == {str}:
        return pa.array(values, pa.string())
    return pa.array([value if value is None else _as_text(value) for value in values], pa.string())


def _as_text(value: object) -> str:
    return repr(value).removesuffix(".0") if isinstance(value, float) else str(value)


def refuse_repeated(source: str, header: Sequence[str]) -> None:
    """Raise if a name stands more than once in a header.

    Raises
    ------
    InputError
        With the names.
    """
    seen: set[str] = set()
    repeated = sorted({name for name in header if name in seen or seen.add(name)})  # type: ignore[func-returns-value]
    if repeated:
        named = ", ".join(f"'{name}'" for name in repeated)
        raise InputError(f"{source}: columns stand more than once in the header: {named}; rename or remove one")


def filled(columns: Mapping[str, pa.Array], count: int) -> NDArray[np.bool_]:
    """Rows in which a cell is not blank."""
    blank = np.arange(count)
    for cells in columns.values():
        if not len(blank):
            break
        blank = blank[~_stands(cells if len(blank) == count else cells.take(pa.array(blank)))]
    found = np.ones(count, dtype=bool)
    found[blank] = False
    return found


def _stands(cells: pa.Array) -> NDArray[np.bool_]:
    """Cells that are not blank."""
    if not pa.types.is_string(cells.type):
        return np.asarray(cells.is_valid())
    return np.asarray(pc.fill_null(pc.not_equal(pc.utf8_trim_whitespace(cells), ""), False))


def joined(tables: Sequence[RawTable]) -> RawTable:
    """Some rows of a table under others, as one; they have the same columns."""
    first, starts = tables[0], starts_of(tables)
    flaws: dict[str, dict[int, str]] = {}
    for table, start in zip(tables, starts, strict=True):
        for name, found in table.flaws.items():
            flaws.setdefault(name, {}).update({start + at: why for at, why in found.items()})
    hashes = [table.sha256 for table in tables if table.sha256]
    return replace(
        first,
        columns={name: one_under_the_other([table.columns[name] for table in tables]) for name in first.columns},
        rows=np.concatenate([table.rows for table in tables]),
        files=tuple(file for table in tables for file in table.files),
        starts=tuple(start + own for table, start in zip(tables, starts, strict=True) for own in table.starts),
        ragged=tuple(reject for table in tables for reject in table.ragged),
        sha256=hashes[0]
        if len(hashes) == 1
        else hashlib.sha256("".join(f"{h}\n" for h in hashes).encode()).hexdigest(),
        flaws=flaws,
    )


def starts_of(tables: Sequence[RawTable]) -> list[int]:
    """Position of the first row of each, when one stands under the other."""
    return list(accumulate((len(table.rows) for table in tables[:-1]), initial=0))


def one_under_the_other(parts: Iterable[pa.Array]) -> pa.Array:
    """A column joined: numbers if all are numbers, else text, a number as the shortest text that means it.

    Raises
    ------
    InputError
        If what its parts hold does not go together.
    """
    parts = list(parts)
    types = {cells.type for cells in parts}
    if len(types) > 1:
        if types == {pa.string(), pa.binary()}:
            return pa.concat_arrays([cells.cast(pa.binary()) for cells in parts])
        numeric = all(is_number(cells) for cells in parts)
        try:
            parts = [cells.cast(pa.float64(), safe=False) if numeric else in_text(cells) for cells in parts]
        except pa.ArrowException:
            raise InputError(
                f"its files hold {' and '.join(sorted(map(str, types)))}, which do not go together"
            ) from None
    return pa.concat_arrays(parts)
