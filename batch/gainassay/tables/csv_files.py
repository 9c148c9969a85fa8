"""Tables in CSV files: any delimiter and encoding, every row under its number."""

from __future__ import annotations

import codecs
import csv
import hashlib
from collections.abc import Iterator, Sequence
from functools import partial
from itertools import islice
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from gainassay.errors import InputError
from gainassay.job import Source
from gainassay.tables.raw import Piece, filled, refuse_repeated, shown
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


def read(path: Path, source: Source) -> Iterator[Piece]:
    """The table in a CSV file, block by block; the last piece holds no rows, but what is known at the end.

    Raises
    ------
    InputError
        If the file cannot be read as CSV in the encoding that the job names, or in UTF-8.
    """
    encoding, header_row = _encoding(path, source.encoding), source.header_row or 1
    sha256 = _hashed(path, encoding)
    header, has_more = _header(path, encoding, source.delimiter or ",", header_row)
    ragged: list[Reject] = []
    row, last = (
        header_row,
        pa.RecordBatch.from_pylist([], pa.schema([(place, pa.string()) for place in _places(header)])),
    )
    # The reader itself refuses a file that ends with its header.
    batches = _batches(path, header, encoding, source.delimiter or ",", header_row, ragged) if has_more else ()
    for batch in batches:
        rows = _next_rows(row, len(batch), [reject.row for reject in ragged])
        yield Piece(str(path), _columns(path, header, header_row, batch), rows)
        if len(batch):
            row, last = int(rows[-1]), batch
    if any("\n" in (cells[-1].as_py() or "") for cells in last.columns if len(cells)) and _quotes(path, encoding) % 2:
        raise InputError(f"{path}: row {row}: a quote is opened and never closed; close or remove it")
    nothing = _columns(path, header, header_row, last.slice(len(last)))
    yield Piece(str(path), nothing, np.array([], np.int64), sha256, tuple(ragged))


def _places(header: Sequence[str]) -> list[str]:
    """Columns by their place, since a header may name some nothing."""
    return [str(place) for place in range(len(header))]


def _next_rows(row: int, count: int, aside: Sequence[int]) -> NDArray[np.int64]:
    """Numbers of the rows that follow a row, those that were set aside passed over."""
    numbers = np.arange(row + 1, row + 1 + count + len(aside))
    return numbers[~np.isin(numbers, aside)][:count] if aside else numbers


def _columns(path: Path, header: Sequence[str], header_row: int, batch: pa.RecordBatch) -> dict[str, pa.Array]:
    """The cells of each column by its name; those of one that has none must be blank."""
    columns = {}
    for place, (name, cells) in enumerate(zip(header, batch.columns, strict=True)):
        if name:
            columns[name] = cells
        elif filled({"": cells}, len(cells)).any():
            raise InputError(
                f"{path}: column {place + 1} has no name in row {header_row}, but cells that are filled; name it, or "
                "say header_row = ... where the names stand further down"
            )
    return columns


def _encoding(path: Path, name: str) -> str:
    """An encoding by the name that Python gives it."""
    try:
        "".encode(name or "utf-8")
        return codecs.lookup(name or "utf-8").name
    except (LookupError, ValueError):
        raise InputError(f"{path}: '{name}' is no encoding of text; use utf-8, utf-16, cp1252 ...") from None


def _batches(
    path: Path, header: list[str], encoding: str, delimiter: str, header_row: int, ragged: list[Reject]
) -> Iterator[pa.RecordBatch]:
    """The rows under the header; those whose number of cells is another are set aside."""
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
        with _opened(path, header, encoding, delimiter, header_row, keep_aside) as reader:
            yield from reader
    except (pa.ArrowInvalid, pa.ArrowKeyError, UnicodeError) as error:
        if swallowing:
            raise InputError(
                f"{path}: row {swallowing[0]}: a quote runs over the end of the line, and the row does not have the "
                "header's number of cells; close or remove the quote"
            ) from None
        raise InputError(f"{path}: cannot be read as CSV in {encoding.upper()}: {str(error).splitlines()[0]}") from None


def _opened(path: Path, header: list[str], encoding: str, delimiter: str, header_row: int, keep_aside: Any) -> Any:
    """A reader of all cells as text, null where nothing stands."""
    import pyarrow.csv as pacsv

    places = _places(header)
    return pacsv.open_csv(
        path,
        read_options=pacsv.ReadOptions(
            # Only on one thread does the reader say the number of a row that it sets aside.
            use_threads=False,
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


def _hashed(path: Path, encoding: str) -> str:
    """Hash of a file, whose text must be in its encoding."""
    digest, decoder, place = hashlib.sha256(), codecs.getincrementaldecoder(encoding)(), 0
    try:
        with path.open("rb") as file:
            while chunk := file.read(1 << 20):
                if not place and encoding == "utf-8":
                    _refuse_other_marks(path, chunk)
                digest.update(chunk)
                decoder.decode(chunk)
                place += len(chunk)
        decoder.decode(b"", final=True)
    except UnicodeError as error:
        at = place + getattr(error, "start", 0)
        raise InputError(
            f"{path}: is not {encoding.upper()} text (byte {at}); save it as CSV in UTF-8, or say "
            "its encoding in the job"
        ) from None
    return digest.hexdigest()


def _quotes(path: Path, encoding: str) -> int:
    """Number of double quotes in the text of a file."""
    with path.open(encoding=encoding, newline="") as file:
        return sum(text.count('"') for text in iter(partial(file.read, 1 << 20), ""))


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
