"""Tables in CSV files: any delimiter and encoding, every row under its number."""

from __future__ import annotations

import codecs
import csv
import hashlib
from itertools import islice
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa

from gainassay.errors import InputError
from gainassay.job import Source
from gainassay.tables.raw import Piece, filled, refuse_repeated, shown, whole
from gainassay.tables.rejects import Reject

BLOCK = 1 << 22
"""Bytes that the reader takes at a time; a row may be that long."""

MARKS = {
    codecs.BOM_UTF32_LE: "utf-32",
    codecs.BOM_UTF32_BE: "utf-32",
    codecs.BOM_UTF16_LE: "utf-16",
    codecs.BOM_UTF16_BE: "utf-16",
}
"""Byte-order marks of other encodings than UTF-8, the longer ones first: one begins as a shorter one does."""


def read(path: Path, source: Source) -> Piece:
    """The table in a CSV file.

    Raises
    ------
    InputError
        If the file cannot be read as CSV in the encoding that the job names, or in UTF-8.
    """
    encoding, header_row = _encoding(path, source.encoding), source.header_row or 1
    sha256, quotes = _scanned(path, encoding)
    header, has_more = _header(path, encoding, source.delimiter or ",", header_row)
    if not has_more:
        return Piece(str(path), _nothing_under(header), np.array([], np.int64), sha256)
    table, ragged = _body(path, header, encoding, source.delimiter or ",", header_row)
    if quotes % 2 and table.num_rows and any("\n" in (column[-1].as_py() or "") for column in table.columns):
        row = header_row + table.num_rows + len(ragged)
        raise InputError(f"{path}: row {row}: a quote is opened and never closed; close or remove it")
    numbers = np.arange(header_row + 1, header_row + 1 + table.num_rows + len(ragged))
    rows = numbers[~np.isin(numbers, [reject.row for reject in ragged])] if ragged else numbers
    columns = {}
    for place, name in enumerate(header):
        cells = whole(table.column(place))
        if name:
            columns[name] = cells
        elif filled({"": cells}, len(cells)).any():
            raise InputError(
                f"{path}: column {place + 1} has no name in row {header_row}, but cells that are filled; name it, or "
                "say header_row = ... where the names stand further down"
            )
    return Piece(str(path), columns, rows, sha256, ragged)


def _encoding(path: Path, name: str) -> str:
    """An encoding by the name that Python gives it."""
    try:
        "".encode(name or "utf-8")
        return codecs.lookup(name or "utf-8").name
    except (LookupError, ValueError):
        raise InputError(f"{path}: '{name}' is no encoding of text; use utf-8, utf-16, cp1252 ...") from None


def _nothing_under(header: list[str]) -> dict[str, pa.Array]:
    return {name: pa.array([], pa.string()) for name in header if name}


def _body(
    path: Path, header: list[str], encoding: str, delimiter: str, header_row: int
) -> tuple[pa.Table, tuple[Reject, ...]]:
    """The rows under the header, and those whose number of cells is another."""
    try:
        return _table(path, header, encoding, delimiter, header_row), ()
    except (pa.ArrowInvalid, UnicodeError):
        # Only on one thread does the reader say the number of a row that it sets aside.
        return _careful_table(path, header, encoding, delimiter, header_row)


def _careful_table(
    path: Path, header: list[str], encoding: str, delimiter: str, header_row: int
) -> tuple[pa.Table, tuple[Reject, ...]]:
    ragged: list[Reject] = []
    swallowing: list[int] = []

    def keep_aside(row: Any) -> str:
        cells = f"the row has {row.actual_columns} cells, the header has {row.expected_columns}"
        try:
            text = row.text
        except UnicodeError:
            return "error"
        if "\n" in text or "\r" in text:
            swallowing.append(row.number)
            return "error"
        ragged.append(Reject(str(path), row.number, "", shown(text), f"{cells}; look for a stray comma or quote"))
        return "skip"

    try:
        return _table(path, header, encoding, delimiter, header_row, keep_aside), tuple(ragged)
    except (pa.ArrowInvalid, pa.ArrowKeyError, UnicodeError) as error:
        if swallowing:
            raise InputError(
                f"{path}: row {swallowing[0]}: a quote runs over the end of the line, and the row does not have the "
                "header's number of cells; close or remove the quote"
            ) from None
        raise InputError(f"{path}: cannot be read as CSV in {encoding.upper()}: {str(error).splitlines()[0]}") from None


def _table(
    path: Path, header: list[str], encoding: str, delimiter: str, header_row: int, keep_aside: Any = None
) -> pa.Table:
    """All cells as text, null where nothing stands; columns by their place, since a header may name some nothing."""
    import pyarrow.csv as pacsv

    places = [str(place) for place in range(len(header))]
    return pacsv.read_csv(
        path,
        read_options=pacsv.ReadOptions(
            use_threads=keep_aside is None,
            skip_rows=header_row,
            column_names=places,
            encoding=encoding,
            block_size=BLOCK,
        ),
        parse_options=pacsv.ParseOptions(
            delimiter=delimiter, newlines_in_values=True, ignore_empty_lines=False, invalid_row_handler=keep_aside
        ),
        convert_options=pacsv.ConvertOptions(
            column_types={place: pa.string() for place in places}, strings_can_be_null=True, null_values=[""]
        ),
    )


def _scanned(path: Path, encoding: str) -> tuple[str, int]:
    """Hash of a file, and the number of double quotes in its text."""
    digest, decoder, quotes, place = hashlib.sha256(), codecs.getincrementaldecoder(encoding)(), 0, 0
    try:
        with path.open("rb") as file:
            while chunk := file.read(1 << 20):
                if not place and encoding == "utf-8":
                    _refuse_other_marks(path, chunk)
                digest.update(chunk)
                quotes += decoder.decode(chunk).count('"')
                place += len(chunk)
        decoder.decode(b"", final=True)
    except UnicodeError as error:
        at = place + getattr(error, "start", 0)
        raise InputError(
            f"{path}: is not {encoding.upper()} text (byte {at}); save it as CSV in UTF-8, or say "
            "its encoding in the job"
        ) from None
    return digest.hexdigest(), quotes


def _refuse_other_marks(path: Path, start: bytes) -> None:
    other = next((name for mark, name in MARKS.items() if start.startswith(mark)), "")
    if other:
        raise InputError(
            f'{path}: is not UTF-8 text but {other.upper()}; say encoding = "{other}" in the job, and the delimiter'
        )


def _header(path: Path, encoding: str, delimiter: str, header_row: int) -> tuple[list[str], bool]:
    """Names of the columns, without surrounding white space, empty where a column has none; whether more follows."""
    try:
        with path.open(encoding="utf-8-sig" if encoding == "utf-8" else encoding, newline="") as file:
            above = list(islice(csv.reader(file, delimiter=delimiter), header_row))
            has_more = bool(file.read(1))
    except csv.Error as error:
        raise InputError(f"{path}: row {header_row}: cannot be read as CSV: {error}") from None
    header = [name.strip() for name in above[-1]] if len(above) == header_row else []
    if not any(header):
        raise InputError(f"{path}: row {header_row} holds no column names")
    for row, cells in enumerate(above, start=1):
        if any("\n" in cell or "\r" in cell for cell in cells):
            raise InputError(
                f"{path}: row {row}: a cell that runs over the end of the line stands in or above the header; "
                "close or remove the quote"
            )
    if any("\0" in name for name in header):
        raise InputError(
            f"{path}: row {header_row}: a name holds a NUL; if the file is UTF-16, say so in the job: "
            'encoding = "utf-16-le"'
        )
    refuse_repeated(str(path), [name for name in header if name])
    return header, has_more
