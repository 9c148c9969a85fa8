"""A single file of results, written whole or not at all."""

from __future__ import annotations

import os
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path

import pyarrow as pa

from gainassay.errors import InputError
from gainassay.runs.folder import WRITERS
from gainassay.runs.tables import sync


def check(path: Path, endings: Iterable[str] = WRITERS) -> None:
    """See that a file could be written to a path.

    Parameters
    ----------
    endings : iterable of str
        What its name may end with; that of a table if not given.

    Raises
    ------
    InputError
        If nothing is written under such a name, or there is no such folder.
    """
    if path.suffix not in endings:
        raise InputError(f"{path}: the name must end with {' or '.join(endings)}")
    if not path.parent.is_dir():
        raise InputError(f"{path}: cannot be written: there is no folder {path.parent}")


def write_whole(table: pa.Table, path: Path) -> None:
    """Write a table, as CSV or Parquet by the ending of the name; a file of that name is replaced.

    Raises
    ------
    InputError
        If the file cannot be written; what lay there before is left as it was.
    """
    check(path)
    with replaced(path) as aside:
        WRITERS[path.suffix](table, aside)


@contextmanager
def replaced(path: Path) -> Iterator[Path]:
    """A file to write to, which takes the place of `path` once it is whole.

    Raises
    ------
    InputError
        If it cannot be written; what lay there before is left as it was.
    """
    aside = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        aside.touch()
        yield aside
        sync(aside)
        aside.replace(path)
        sync(path.parent)
    except OSError as error:
        raise InputError(f"{path}: cannot be written: {error.strerror or error}") from None
    finally:
        aside.unlink(missing_ok=True)
