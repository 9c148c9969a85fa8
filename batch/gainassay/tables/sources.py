"""A table from wherever it lies: files by their kind, databases by their address; under the job's names of columns."""

from __future__ import annotations

import hashlib
import os
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path

import numpy as np
import pyarrow as pa

from gainassay.contracts import tables
from gainassay.contracts.tables import Column
from gainassay.errors import InputError
from gainassay.job import Source, is_address
from gainassay.tables import csv_files, databases, parquet_files, workbooks
from gainassay.tables.headings import headings
from gainassay.tables.raw import Piece, RawTable, joined

READERS: Mapping[str, Callable[[Path, Source], Piece]] = {
    "csv": csv_files.read,
    "parquet": lambda path, _: parquet_files.read(path),
    "workbook": workbooks.read,
    "database": databases.read_file,
}

KINDS = {
    ".csv": "csv",
    ".parquet": "parquet",
    ".xlsx": "workbook",
    ".sqlite": "database",
    ".sqlite3": "database",
    ".db": "database",
}
"""Kinds of files by the ending of their names; one with a delimiter is CSV, one with a table or query a database."""

OPTIONS = {
    "csv": {"delimiter", "encoding", "header_row"},
    "parquet": set[str](),
    "workbook": {"sheet", "header_row"},
    "database": {"table", "query"},
}
"""What a job may say of each kind, beside what it may say of all."""


def read(source: Source, known: Mapping[str, Column]) -> RawTable:
    """The table that a job names. Rows in which nothing stands are passed over.

    Parameters
    ----------
    known : Mapping[str, Column]
        The columns that such a table may have, by name.

    Raises
    ------
    InputError
        If it cannot be read as what the job says, or a column that the job names is not there.
    """
    pieces = [piece.without_blank_rows() for piece in _pieces(source)]
    whole = joined(source.at, pieces)
    found = headings(source, whole, known)
    columns = {found.names.get(name, name): cells for name, cells in whole.columns.items()}
    constants = {name: pa.repeat(pa.scalar(value), len(whole.rows)) for name, value in found.constants.items()}
    return RawTable(
        source=whole.source,
        key=tables.key(source.section),
        columns={**columns, **constants},
        rows=whole.rows,
        files=tuple(piece.source for piece in pieces),
        starts=tuple(int(start) for start in np.cumsum([0, *(len(piece.rows) for piece in pieces[:-1])])),
        ragged=whole.ragged,
        sha256=_hash_of(pieces),
        flaws={found.names.get(name, name): flaws for name, flaws in whole.flaws.items()},
        headings=found.by_name,
        decimal=source.decimal,
    )


def _pieces(source: Source) -> list[Piece]:
    """What a source holds: one piece, or one for each file of a folder or pattern."""
    if is_address(source.at):
        _refuse_other_options(source, "database")
        return [databases.read_address(source)]
    return [_file(path, source) for path in _paths(source.at)]


def _file(path: Path, source: Source) -> Piece:
    said = [kind for kind, option in (("csv", source.delimiter), ("database", source.table or source.query)) if option]
    kind = said[0] if said else KINDS.get(path.suffix.lower())
    _must_be_readable(path)
    if kind is None:
        raise InputError(
            f"{path}: '{path.suffix}' is no kind of table that can be read; use {', '.join(KINDS)}, or say the "
            "delimiter of a text file, or the table of a database"
        )
    _refuse_other_options(source, kind)
    return READERS[kind](path, source)


def _refuse_other_options(source: Source, kind: str) -> None:
    if source.table and source.query:
        raise InputError(f"{source.at}: in [{source.section}]: table and query are both given; give one of the two")
    for option in sorted({option for options in OPTIONS.values() for option in options} - OPTIONS[kind]):
        if getattr(source, option):
            raise InputError(f"{source.at}: in [{source.section}]: '{option}' says nothing of a {kind}; remove it")


def _paths(at: str) -> list[Path]:
    """The files that a path, a folder or a pattern names, in the order of their names."""
    path = Path(at)
    try:
        if path.is_dir():
            return _all_of_a_kind(at, [p for p in _under(path) if _is_table(p.relative_to(path))])
        if not path.exists() and any(mark in at for mark in "*?["):
            start = Path(path.anchor)
            pattern = str(path.relative_to(start)) if path.anchor else at
            return _all_of_a_kind(at, [p for p in start.glob(pattern) if not p.is_dir()])
    except (OSError, ValueError, NotImplementedError) as error:
        raise InputError(f"{at}: cannot be read: {getattr(error, 'strerror', None) or error}") from None
    return [path]


def _under(folder: Path) -> Iterator[Path]:
    """All files of a folder and of those in it; one that cannot be looked into is a fault, and not passed over."""

    def fail(error: OSError) -> None:
        raise error

    for home, _, names in os.walk(folder, onerror=fail):
        yield from (Path(home, name) for name in names)


def _is_table(path: Path) -> bool:
    """Whether a file in a folder is one of its tables; what starts with a dot or underscore is a program's own."""
    return path.suffix.lower() in KINDS and not any(part.startswith((".", "_")) for part in path.parts)


def _all_of_a_kind(at: str, paths: list[Path]) -> list[Path]:
    kinds = sorted({path.suffix.lower() for path in paths})
    if not paths:
        raise InputError(f"{at}: there is no such table in it; wanted are files {', '.join(KINDS)}")
    if len(kinds) > 1:
        raise InputError(f"{at}: holds files of several kinds, {', '.join(kinds)}; name one, such as {at}/*{kinds[0]}")
    return sorted(paths)


def _must_be_readable(path: Path) -> None:
    try:
        if path.exists() and not path.is_file():
            # A pipe or device would be waited for, or never end.
            raise InputError(f"{path}: is no file; save the table as one")
        with path.open("rb"):
            return
    except FileNotFoundError:
        raise InputError(f"{path}: there is no such file") from None
    except (OSError, ValueError) as error:
        raise InputError(f"{path}: cannot be read: {getattr(error, 'strerror', None) or error}") from None


def _hash_of(pieces: list[Piece]) -> str:
    if len(pieces) == 1:
        return pieces[0].sha256
    return hashlib.sha256("".join(f"{piece.sha256}\n" for piece in pieces).encode()).hexdigest()
