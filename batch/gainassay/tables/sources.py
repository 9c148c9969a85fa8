"""Tables as they lie in files: cells as they stand, with the row that a person would look for."""

from __future__ import annotations

import codecs
import csv
import hashlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from gainassay.errors import InputError
from gainassay.tables.rejects import Reject

LONGEST_SHOWN = 200
"""Characters of a cell that a reject repeats."""


@dataclass(frozen=True)
class RawTable:
    """A table as it stands in its source.

    Attributes
    ----------
    source : str
        What messages call it.
    columns : dict[str, pyarrow.Array]
        Cells: strings, or numbers where the file holds numbers; of another type only what cannot be text.
    rows : ndarray of int, shape (rows,)
        Row in the file: a CSV's header is row 1, as a spreadsheet counts; a Parquet file's first row is 1.
    ragged : tuple[Reject, ...]
        Rows of a CSV file whose number of cells is not the header's.
    sha256 : str
        Hash of the file.
    """

    source: str
    columns: dict[str, pa.Array]
    rows: NDArray[np.int64]
    ragged: tuple[Reject, ...]
    sha256: str


def read(path: Path) -> RawTable:
    """The table in a .csv or .parquet file. Rows in which nothing stands are passed over.

    Raises
    ------
    InputError
        If the file cannot be read as what its name says.
    """
    try:
        with path.open("rb") as file:
            sha256 = hashlib.file_digest(file, "sha256").hexdigest()
    except FileNotFoundError:
        raise InputError(f"{path}: there is no such file") from None
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: cannot be read: {getattr(error, 'strerror', None) or error}") from None
    match path.suffix.lower():
        case ".csv":
            columns, rows, ragged = _csv(path)
        case ".parquet":
            columns, rows, ragged = _parquet(path)
        case other:
            raise InputError(f"{path}: '{other}' is no kind of table that can be read; use .csv or .parquet")
    filled = _filled(columns, len(rows))
    return RawTable(
        source=str(path),
        columns={name: cells.filter(pa.array(filled)) for name, cells in columns.items()},
        rows=rows[filled],
        ragged=ragged,
        sha256=sha256,
    )


def shown(text: str) -> str:
    """A cell as a reject repeats it."""
    return text if len(text) <= LONGEST_SHOWN else f"{text[:LONGEST_SHOWN]}... ({len(text)} characters)"


def _csv(path: Path) -> tuple[dict[str, pa.Array], NDArray[np.int64], tuple[Reject, ...]]:
    import pyarrow.csv as pacsv

    quotes = _utf_8(path)
    header = _header(path)
    places = [str(place) for place in range(len(header))]
    ragged: list[Reject] = []
    swallowing: list[int] = []

    def keep_aside(row: pacsv.InvalidRow) -> str:
        cells = f"the row has {row.actual_columns} cells, the header has {row.expected_columns}"
        try:
            text = row.text
        except UnicodeDecodeError:
            return "error"
        if "\n" in text or "\r" in text:
            swallowing.append(row.number)
            return "error"
        ragged.append(Reject(str(path), row.number, "", shown(text), f"{cells}; look for a stray comma or quote"))
        return "skip"

    try:
        table = pacsv.read_csv(
            path,
            # One thread: only then does the reader say the number of a row it sets aside. Columns go by their
            # place until all is read, since a header may name several of them nothing.
            read_options=pacsv.ReadOptions(use_threads=False, skip_rows=1, column_names=places),
            parse_options=pacsv.ParseOptions(
                newlines_in_values=True, ignore_empty_lines=False, invalid_row_handler=keep_aside
            ),
            convert_options=pacsv.ConvertOptions(
                column_types={place: pa.string() for place in places}, strings_can_be_null=False
            ),
        )
    except (pa.ArrowInvalid, pa.ArrowKeyError, UnicodeDecodeError) as error:
        if swallowing:
            raise InputError(
                f"{path}: row {swallowing[0]}: a quote runs over the end of the line, and the row does not have the "
                "header's number of cells; close or remove the quote"
            ) from None
        raise InputError(f"{path}: cannot be read as CSV in UTF-8: {str(error).splitlines()[0]}") from None
    if quotes % 2 and table.num_rows and any("\n" in (column[-1].as_py() or "") for column in table.columns):
        row = 1 + table.num_rows + len(ragged)
        raise InputError(f"{path}: row {row}: a quote is opened and never closed; close or remove it")
    aside = {reject.row for reject in ragged}
    numbers = np.arange(2, 2 + table.num_rows + len(aside))
    rows = numbers[~np.isin(numbers, list(aside))] if aside else numbers
    columns = {}
    for place, name in enumerate(header):
        cells = _whole(table.column(place))
        if name:
            columns[name] = cells
        elif _filled({"": cells}, len(cells)).any():
            raise InputError(f"{path}: column {place + 1} has no name in row 1, but cells that are filled; name it")
    return columns, rows, tuple(ragged)


def _utf_8(path: Path) -> int:
    """The number of double quotes in a file that must be UTF-8."""
    decoder, quotes, place = codecs.getincrementaldecoder("utf-8")(), 0, 0
    try:
        with path.open("rb") as file:
            while chunk := file.read(1 << 20):
                quotes += chunk.count(b'"')
                decoder.decode(chunk)
                place += len(chunk)
        decoder.decode(b"", final=True)
    except UnicodeDecodeError as error:
        raise InputError(f"{path}: is not UTF-8 text (byte {place + error.start}); save it as CSV in UTF-8") from None
    return quotes


def _header(path: Path) -> list[str]:
    """Names of the columns, without surrounding white space; empty where a column has none."""
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            header = next(csv.reader(file), [])
    except UnicodeDecodeError as error:
        raise InputError(f"{path}: is not UTF-8 text (byte {error.start}); save it as CSV in UTF-8") from None
    except csv.Error as error:
        raise InputError(f"{path}: row 1: cannot be read as CSV: {error}") from None
    header = [name.strip() for name in header]
    if not any(header):
        raise InputError(f"{path}: row 1 holds no column names")
    if any("\n" in name or "\r" in name for name in header):
        raise InputError(f"{path}: row 1: a column's name runs over the end of the line; close or remove the quote")
    _refuse_repeated(path, [name for name in header if name])
    return header


def _parquet(path: Path) -> tuple[dict[str, pa.Array], NDArray[np.int64], tuple[Reject, ...]]:
    import pyarrow.parquet as pq

    try:
        table = pq.read_table(path)
    except (pa.ArrowException, OSError) as error:
        raise InputError(f"{path}: cannot be read as Parquet: {str(error).splitlines()[0]}") from None
    _refuse_repeated(path, table.column_names)
    columns = {name: _plain_type(_whole(table.column(name))) for name in table.column_names}
    return columns, np.arange(1, 1 + table.num_rows), ()


def _plain_type(cells: pa.Array) -> pa.Array:
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


def is_number(cells: pa.Array) -> bool:
    """Whether a column holds numbers, not text."""
    return bool(pa.types.is_floating(cells.type) or pa.types.is_integer(cells.type))


def _refuse_repeated(path: Path, header: list[str]) -> None:
    repeated = sorted({name for name in header if header.count(name) > 1})
    if repeated:
        named = ", ".join(f"'{name}'" for name in repeated)
        raise InputError(f"{path}: columns stand more than once in the header: {named}; rename or remove one")


def _whole(cells: pa.ChunkedArray) -> pa.Array:
    whole = cells.combine_chunks()
    return whole if isinstance(whole, pa.Array) else pa.concat_arrays(whole.chunks)


def _filled(columns: dict[str, pa.Array], count: int) -> NDArray[np.bool_]:
    filled = np.zeros(count, dtype=bool)
    for cells in columns.values():
        if pa.types.is_string(cells.type):
            filled |= ~np.asarray(pc.match_substring_regex(pc.fill_null(cells, ""), r"^\s*$"))
        else:
            filled |= np.asarray(cells.is_valid())
    return filled
