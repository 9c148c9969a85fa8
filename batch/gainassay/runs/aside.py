"""A single file of results, written whole or not at all."""

from __future__ import annotations

import os
from pathlib import Path

import pyarrow as pa

from gainassay.errors import InputError
from gainassay.runs.folder import WRITERS
from gainassay.runs.tables import sync


def ending(path: Path) -> str:
    """The ending of a name under which a table can be written.

    Raises
    ------
    InputError
        If no table is written under such a name.
    """
    if path.suffix not in WRITERS:
        raise InputError(f"{path}: the name must end with {' or '.join(sorted(WRITERS))}")
    return path.suffix


def write_whole(table: pa.Table, path: Path) -> None:
    """Write a table, as CSV or Parquet by the ending of the name; a file of that name is replaced.

    Raises
    ------
    InputError
        If the file cannot be written; what lay there before is left as it was.
    """
    aside = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        WRITERS[ending(path)](table, aside)
        aside.replace(path)
        sync(path.parent)
    except OSError as error:
        raise InputError(f"{path}: cannot be written: {error.strerror or error}") from None
    finally:
        aside.unlink(missing_ok=True)
