"""A table read some rows at a time gives what it gives in one: figures, rejects, numbers of rows."""

from __future__ import annotations

import sqlite3
from collections.abc import Callable
from dataclasses import asdict
from pathlib import Path

import numpy as np
import pyarrow.csv as pacsv
import pyarrow.parquet as pq
import pytest

from gainassay.errors import InputError
from gainassay.job import Source
from gainassay.tables import csv_files, databases, parquet_files, parts, sources
from gainassay.tables.parts import PartTable

HEADER = "part,a_ol_min,a_ol_typ,r_id_typ,family"


def row(number: int) -> str:
    """A row, some of them with faults that lie far from each other."""
    faults = {
        7: "amp-090,1e5,,1M,repeated far below",
        20: ",,,,",
        33: "amp-033,2e5,1e5,1M,crossed",
        57: "amp-057,1e5,,4k7x,no number",
        58: ",1e5,,1M,no name",
        119: "total,1e5,,1M,",
    }
    return faults.get(number, f"amp-{number:03d},{1e5 + number:g},,{number + 1}k,")


ROWS = [row(number) for number in range(120)]


def must_be_same(one: PartTable, other: PartTable) -> None:
    """See that two tables hold the same, nan where the other has nan."""
    np.testing.assert_equal(asdict(one), asdict(other))


def in_small_and_in_large(
    monkeypatch: pytest.MonkeyPatch, load: Callable[[], PartTable]
) -> tuple[PartTable, PartTable]:
    """A table read in small blocks and in one."""
    # The hash of a database's result is that of its chunks.
    monkeypatch.setattr(databases, "ROWS_AT_A_TIME", 5)
    large = load()
    monkeypatch.setattr(csv_files, "BLOCK", 256)
    monkeypatch.setattr(parquet_files, "ROWS_AT_A_TIME", 10)
    monkeypatch.setattr(databases, "CHUNKS_OF_A_PIECE", 2)
    return load(), large


def test_a_csv_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "parts.csv"
    ragged = [*ROWS[:50], "amp-ragged,1", *ROWS[50:]]
    path.write_text("\n".join([HEADER, *ragged, "amp-ragged,2"]) + "\n")
    small, large = in_small_and_in_large(monkeypatch, lambda: parts.load(Source("parts", str(path)), {}))
    assert len(list(sources.blocks(Source("parts", str(path)), {}))) > 5
    must_be_same(small, large)
    assert [(reject.row, reject.column) for reject in small.rejects] == [
        (9, "part"),
        (35, "a_ol_min, a_ol_typ"),
        (52, ""),
        (60, "r_id_typ"),
        (61, "part"),
        (93, "part"),
        (122, "part"),
        (123, ""),
    ]
    assert (small.rows, small.used()) == (121, 113)


@pytest.mark.parametrize("kind", ["parquet", "sqlite"])
def test_a_parquet_file_and_a_database(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, kind: str) -> None:
    path, as_csv = tmp_path / f"parts.{kind}", tmp_path / "parts.csv"
    as_csv.write_text("\n".join([HEADER, *ROWS]) + "\n")
    table = pacsv.read_csv(as_csv, convert_options=pacsv.ConvertOptions(strings_can_be_null=True))
    if kind == "parquet":
        pq.write_table(table, path)
    else:
        with sqlite3.connect(path) as connection:
            connection.execute(f"create table parts ({HEADER})")
            connection.executemany(
                "insert into parts values (?, ?, ?, ?, ?)", [tuple(row.values()) for row in table.to_pylist()]
            )
    source = Source("parts", str(path), table="parts" if kind == "sqlite" else "")
    small, large = in_small_and_in_large(monkeypatch, lambda: parts.load(source, {}))
    must_be_same(small, large)
    assert [reject.row for reject in small.rejects] == [8, 34, 58, 59, 91, 120]


def test_a_quote_that_is_never_closed_far_down(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "parts.csv"
    path.write_text("\n".join([HEADER, *ROWS[:100], 'amp-open,1e5,,1M,"open', "amp-lost,1e5,,1M,"]) + "\n")
    monkeypatch.setattr(csv_files, "BLOCK", 256)
    with pytest.raises(InputError, match="row 102: a quote is opened and never closed"):
        parts.load(Source("parts", str(path)), {})
