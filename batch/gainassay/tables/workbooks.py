"""Tables in sheets of .xlsx workbooks; what is no plain value in its cell is kept with the reason."""

from __future__ import annotations

import datetime
import hashlib
import re
import warnings
import zipfile
from collections.abc import Iterator
from io import BufferedReader
from pathlib import Path
from typing import Any

import numpy as np

from gainassay.errors import InputError
from gainassay.job import Source
from gainassay.tables.raw import Piece, array_of, refuse_repeated

MOST_BYTES = 1 << 30
"""Size of a workbook's content when it is unpacked."""

MOST_ROWS = 1 << 20
"""Rows of a sheet, by the format's own limit."""

MERGED = re.compile(rb'<(?:\w+:)?mergeCell\s+ref="([A-Z]{1,3}[0-9]{1,7}:[A-Z]{1,3}[0-9]{1,7})"')

DATES = (datetime.datetime, datetime.date, datetime.time, datetime.timedelta)

NO_VALUES = {
    "f": "is a formula, and formulas are not evaluated; paste its value in its place",
    "e": "is a spreadsheet's error; mend it there",
    "d": "is a date, into which spreadsheets turn numbers and names; write what was meant, as text",
    "%": "is shown with a sign, word or scale that its value does not hold; give the cell a plain number format",
}
"""By the kind of a cell: why it is no plain value."""


SHOWN_OTHERWISE = re.compile(r'%|"[^"]*[^\W\d_][^"]*"|\\[^\W\d_]|[0#?],+(?![0#?,])')
"""Formats of numbers, such as `0%`, `0.0" kohm"` or `0.0,`, by which 0.01 is shown as 1 or 5 as a resistance."""


def read(path: Path, source: Source) -> Piece:
    """The table in a sheet of a workbook.

    Raises
    ------
    InputError
        If the file is no workbook, has no such sheet, or the sheet holds no table.
    """
    _refuse_what_unpacks_too_large(path)
    try:
        with path.open("rb") as file, warnings.catch_warnings():
            # The library warns of what it leaves out: styles, validations, drawings. None of it is a value.
            warnings.simplefilter("ignore")
            return _read(path, file, source)
    except (InputError, MemoryError):
        raise
    except Exception as error:  # a damaged workbook makes the library fail in ways of its own
        reason = (str(error).splitlines() or [type(error).__name__])[0]
        raise InputError(f"{path}: cannot be read as an .xlsx workbook: {reason}") from None


def _refuse_what_unpacks_too_large(path: Path) -> None:
    try:
        with zipfile.ZipFile(path) as archive:
            size = sum(member.file_size for member in archive.infolist())
    except (zipfile.BadZipFile, OSError, ValueError):
        raise InputError(
            f"{path}: is no .xlsx workbook, or is protected by a password; save it anew as .xlsx, without one"
        ) from None
    if size > MOST_BYTES:
        raise InputError(f"{path}: unpacks to {size:,} bytes, {MOST_BYTES:,} at most are read; save the table as CSV")


def _read(path: Path, file: BufferedReader, source: Source) -> Piece:
    import openpyxl

    sha256 = hashlib.file_digest(file, "sha256").hexdigest()
    book = openpyxl.load_workbook(file, read_only=True, keep_links=False)
    try:
        sheet = _sheet(path, book, source.sheet)
        where = f"{path}, sheet '{sheet.title}'"
        # What a file says of its own size may be wrong.
        sheet.reset_dimensions()
        rows = sheet.iter_rows()
        header_row = source.header_row or 1
        header = _header(where, rows, header_row)
        columns, flaws = _body(where, rows, header, header_row, _shown_otherwise(book))
        merged = list(_merged(path, sheet))
    finally:
        book.close()
    count = len(columns[0]) if columns else 0
    for name, position, reason in _flaws_of_merged(where, merged, header, header_row, count):
        flaws.setdefault(name, {}).setdefault(position, reason)
    named = {name: array_of(cells) for name, cells in zip(header, columns, strict=True) if name}
    return Piece(where, named, np.arange(header_row + 1, header_row + 1 + count), sha256, (), flaws)


def _sheet(path: Path, book: Any, name: str) -> Any:
    """The sheet of a name, or the only visible one."""
    visible = [sheet for sheet in book.worksheets if sheet.sheet_state == "visible"]
    named = [sheet for sheet in (book.worksheets if name else visible) if name in ("", sheet.title)]
    if len(named) != 1:
        listed = ", ".join(f"'{sheet.title}'" for sheet in visible)
        what = f"there is no sheet '{name}'" if name else "it has several sheets, or none"
        raise InputError(f'{path}: {what}; say sheet = "..." in the job; it has {listed or "no visible sheet"}')
    return named[0]


def _header(where: str, rows: Iterator[tuple[Any, ...]], header_row: int) -> list[str]:
    """Names of the columns as far as the last that has one; empty where a column has none."""
    cells: tuple[Any, ...] = ()
    for _ in range(header_row):
        cells = next(rows, ())
    header = ["" if cell.value is None else str(cell.value).strip() for cell in cells]
    while header and not header[-1]:
        header.pop()
    if not header:
        raise InputError(f"{where}: row {header_row} holds no column names; say header_row = ... in the job")
    for cell, name in zip(cells, header, strict=False):
        if name and cell.data_type in NO_VALUES:
            raise InputError(f"{where}: cell {cell.coordinate}, the name of a column, {NO_VALUES[cell.data_type]}")
    refuse_repeated(where, [name for name in header if name])
    return header


def _body(
    where: str, rows: Iterator[tuple[Any, ...]], header: list[str], header_row: int, shown_otherwise: frozenset[int]
) -> tuple[list[list[Any]], dict[str, dict[int, str]]]:
    """Cells by column, and what is wrong with those that are no plain values."""
    columns: list[list[Any]] = [[] for _ in header]
    flaws: dict[str, dict[int, str]] = {}
    for position, cells in enumerate(rows):
        if position > MOST_ROWS:
            raise InputError(f"{where}: has more than {MOST_ROWS:,} rows, more than the format allows")
        for place, cell in enumerate(cells):
            value = cell.value
            if value is None:
                continue
            if place >= len(header) or not header[place]:
                if str(value).strip():
                    raise InputError(
                        f"{where}: cell {cell.coordinate} is filled, but its column has no name in row {header_row}; "
                        "name it, or say header_row = ... where the names stand further down"
                    )
                continue
            columns[place].extend([None] * (position - len(columns[place])))
            columns[place].append(_value(value))
            reason = NO_VALUES.get(_kind(cell, value, shown_otherwise))
            if reason:
                flaws.setdefault(header[place], {})[position] = reason
    count = max(map(len, columns))
    for column in columns:
        column.extend([None] * (count - len(column)))
    return columns, flaws


def _shown_otherwise(book: Any) -> frozenset[int]:
    """The styles, by their place in a workbook, whose numbers do not look like what is held."""
    from openpyxl.styles.numbers import BUILTIN_FORMATS, BUILTIN_FORMATS_MAX_SIZE

    formats = {**BUILTIN_FORMATS, **dict(enumerate(book._number_formats, start=BUILTIN_FORMATS_MAX_SIZE))}
    return frozenset(
        place
        for place, style in enumerate(book._cell_styles)
        if SHOWN_OTHERWISE.search(formats.get(style.numFmtId, ""))
    )


def _kind(cell: Any, value: Any, shown_otherwise: frozenset[int]) -> str:
    """What a cell is, as in `NO_VALUES`, or as the library says."""
    if isinstance(value, DATES):
        return "d"
    return "%" if cell.data_type == "n" and cell._style_id in shown_otherwise else str(cell.data_type)


def _value(value: Any) -> Any:
    """A cell as number or text."""
    if isinstance(value, bool):
        return str(value).upper()
    if isinstance(value, int | float | str):
        return value
    return str(getattr(value, "text", value))


def _merged(path: Path, sheet: Any) -> Iterator[str]:
    """Ranges of merged cells, which stand behind the cells of a sheet and are left out when it is read in one pass."""
    with zipfile.ZipFile(path) as archive, archive.open(sheet._worksheet_path) as file:
        rest = b""
        while chunk := file.read(1 << 20):
            text = rest + chunk
            yield from (found.decode() for found in MERGED.findall(text))
            # A mark that is cut off goes with the next chunk.
            rest = text[text.rfind(b"<") :]


def _flaws_of_merged(
    where: str, ranges: list[str], header: list[str], header_row: int, count: int
) -> Iterator[tuple[str, int, str]]:
    """Column, position and reason for each cell that is merged with others."""
    from openpyxl.utils import range_boundaries

    for merged in ranges:
        left, top, right, bottom = range_boundaries(merged)
        names = header[left - 1 : right]
        if top <= header_row <= bottom and any(names):
            raise InputError(
                f"{where}: the cells {merged} in the header are merged; split them, so that each column has its name"
            )
        for name in filter(None, names):
            for row in range(max(top, header_row + 1), min(bottom, header_row + count) + 1):
                yield name, row - header_row - 1, f"is one of the merged cells {merged}; split them and fill each"
