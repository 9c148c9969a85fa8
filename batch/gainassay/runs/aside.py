"""A single file of results, written whole or not at all."""

from __future__ import annotations

import os
from pathlib import Path

import pyarrow as pa

from gainassay.errors import InputError
from gainassay.runs.folder import WRITERS
from gainassay.runs.tables import sync


def check(path: Path) -> None:
    """See that a table could be written to a path.

    Raises
    ------
    InputError
        If no table is written under such a name, or there is no such folder.
    """
    if path.suffix not in WRITERS:
        raise InputError(f"{path}: the name must end with {' or '.join(WRITERS)}")
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
    aside = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        aside.touch()
        WRITERS[path.suffix](table, aside)
        aside.replace(path)
        sync(path.parent)
    except OSError as error:
        raise InputError(f"{path}: cannot be written: {error.strerror or error}") from None
    finally:
        aside.unlink(missing_ok=True)
