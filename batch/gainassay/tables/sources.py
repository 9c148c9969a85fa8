"""A table from wherever it lies: files by their kind, databases by their address; under the job's names of columns."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from itertools import chain
from pathlib import Path

import pyarrow as pa

from gainassay.contracts import tables
from gainassay.contracts.tables import Column
from gainassay.errors import InputError
from gainassay.job import Source, is_address
from gainassay.tables import csv_files, databases, parquet_files, workbooks
from gainassay.tables.headings import Headings, headings
from gainassay.tables.raw import Piece, RawTable, joined

READERS: Mapping[str, Callable[[Path, Source], Iterator[Piece]]] = {
    "csv": lambda path, source: _read_ahead(csv_files.read(path, source)),
    "parquet": lambda path, _: _read_ahead(parquet_files.read(path)),
    "workbook": lambda path, source: map(workbooks.read, [path], [source]),
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
    """The whole table that a job names; else as `blocks`."""
    return joined(list(blocks(source, known)))


def blocks(source: Source, known: Mapping[str, Column]) -> Iterator[RawTable]:
    """The table that a job names, some rows at a time. Rows in which nothing stands are passed over.

    Parameters
    ----------
    known : Mapping[str, Column]
        The columns that such a table may have, by name.

    Raises
    ------
    InputError
        If it cannot be read as what the job says, or a column that the job names is not there.
    """
    if is_address(source.at):
        _refuse_other_options(source, "database")
        files = [databases.read_address(source)]
    else:
        files = [_file(path, source) for path in _paths(source.at)]
    pieces = chain.from_iterable(files)
    first = next(pieces)
    called = source.at if len(files) > 1 else first.source
    found = headings(source, called, first.columns, known)
    for piece in chain([first], pieces):
        _refuse_other_columns(first, piece)
        yield _named(piece.without_blank_rows(), called, source, found)


def _named(piece: Piece, called: str, source: Source, found: Headings) -> RawTable:
    """A piece under the job's names of columns, with what stands in every row."""
    columns = {found.names.get(name, name): cells for name, cells in piece.columns.items()}
    columns |= {name: pa.repeat(pa.scalar(value), len(piece.rows)) for name, value in found.constants.items()}
    return RawTable(
        source=called,
        key=tables.key(source.section),
        header=tuple(columns),
        columns=columns,
        rows=piece.rows,
        files=(piece.source,),
        starts=(0,),
        ragged=piece.ragged,
        sha256=piece.sha256,
        flaws={found.names.get(name, name): flaws for name, flaws in piece.flaws.items()},
        headings=found.by_name,
        decimal=source.decimal,
    )


def _refuse_other_columns(first: Piece, piece: Piece) -> None:
    for one, other in ((first, piece), (piece, first)):
        lacking = sorted(one.columns.keys() - other.columns.keys())
        if lacking:
            raise InputError(f"{other.source}: lacks the column '{lacking[0]}', which {one.source} has")


def _file(path: Path, source: Source) -> Iterator[Piece]:
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


def _read_ahead(pieces: Iterator[Piece]) -> Iterator[Piece]:
    """The same pieces, each of them read while the one before is worked on."""
    with ThreadPoolExecutor(max_workers=1) as reader:
        coming = reader.submit(next, pieces, None)
        while (piece := coming.result()) is not None:
            coming = reader.submit(next, pieces, None)
            yield piece


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
    """All files of a folder and of those in it; one that is not looked into is a fault, and not passed over."""

    def fail(error: OSError) -> None:
        raise error

    for home, folders, names in os.walk(folder, onerror=fail):
        for path in (Path(home, name) for name in folders):
            if path.is_symlink() and not _is_a_programs_own(path.relative_to(folder)):
                raise InputError(
                    f"{path}: is a link to a folder, which is not followed; name that folder itself, or use a pattern, "
                    f"such as {path}/*.csv"
                )
        yield from (Path(home, name) for name in names)


def _is_table(path: Path) -> bool:
    """Whether a file in a folder is one of its tables."""
    return path.suffix.lower() in KINDS and not _is_a_programs_own(path)


def _is_a_programs_own(path: Path) -> bool:
    """Whether a path starts with a dot or underscore, or a folder in it does."""
    return any(part.startswith((".", "_")) for part in path.parts)


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
