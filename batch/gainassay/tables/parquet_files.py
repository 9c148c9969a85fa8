"""Tables in Parquet files."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from itertools import chain
from pathlib import Path

import numpy as np
import pyarrow as pa

from gainassay.errors import InputError
from gainassay.tables.raw import Piece, plain_type, refuse_repeated

ROWS_AT_A_TIME = 1 << 16
"""What is checked together: fewer cost more for each row, more leave the cache."""


def read(path: Path) -> Iterator[Piece]:
    """The table in a Parquet file, some rows at a time.

    Raises
    ------
    InputError
        If the file cannot be read as Parquet.
    """
    import pyarrow.parquet as pq

    with path.open("rb") as file:
        sha256 = hashlib.file_digest(file, "sha256").hexdigest()
    done = 0
    try:
        with pq.ParquetFile(path) as table:
            header = table.schema_arrow.names
            refuse_repeated(str(path), header)
            nothing = pa.RecordBatch.from_pylist([], table.schema_arrow)
            for batch in chain([nothing], table.iter_batches(ROWS_AT_A_TIME)):
                columns = {name: plain_type(cells) for name, cells in zip(header, batch.columns, strict=True)}
                yield Piece(str(path), columns, np.arange(1 + done, 1 + done + len(batch)), sha256)
                done, sha256 = done + len(batch), ""
    except (pa.ArrowException, OSError) as error:
        raise InputError(f"{path}: cannot be read as Parquet: {str(error).splitlines()[0]}") from None
