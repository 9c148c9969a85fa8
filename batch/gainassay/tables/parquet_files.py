"""Tables in Parquet files."""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np
import pyarrow as pa

from gainassay.errors import InputError
from gainassay.tables.raw import Piece, plain_type, refuse_repeated, whole


def read(path: Path) -> Piece:
    """The table in a Parquet file.

    Raises
    ------
    InputError
        If the file cannot be read as Parquet.
    """
    import pyarrow.parquet as pq

    with path.open("rb") as file:
        sha256 = hashlib.file_digest(file, "sha256").hexdigest()
    try:
        # The folders of a path are no columns.
        table = pq.read_table(path, partitioning=None)
    except (pa.ArrowException, OSError) as error:
        raise InputError(f"{path}: cannot be read as Parquet: {str(error).splitlines()[0]}") from None
    refuse_repeated(str(path), table.column_names)
    columns = {name: plain_type(whole(table.column(name))) for name in table.column_names}
    return Piece(str(path), columns, np.arange(1, 1 + table.num_rows), sha256)
