"""The verdict tables depend on nothing but the inputs: not on order, blocks, threads or the kind of file."""

from __future__ import annotations

import csv
import random
from collections.abc import Mapping, Sequence
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from gainassay import resources, service
from gainassay.runs.tables import REPEATED
from gainassay.screen import blocks

if TYPE_CHECKING:
    from conftest import JobWriter

Table = Sequence[Mapping[str, str]]

SAMPLE = resources.sample_sets() / "river_gauging"
RESULTS = "[assume]\nr_o = { typical_times = 2, value = 300 }\n[results]\nterms = true\nviews = true\nsamples = 100\n"


def some_of(name: str, every: int) -> Table:
    """Some rows of a table of the sample set."""
    with (SAMPLE / name).open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))[::every]


STAGES, PARTS = some_of("stages.csv", 9), some_of("parts.csv", 12)


@pytest.fixture(autouse=True)
def small_chunks(monkeypatch: pytest.MonkeyPatch) -> None:
    """Several verdict files even for a small job."""
    monkeypatch.setattr(blocks, "PAIRS_PER_CHUNK", 150)


def files(job: Path, workers: int = 2) -> dict[str, bytes]:
    """The files of a run of a job that hold verdicts or summaries."""
    folder = service.screen(service.prepare(job), workers).folder
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in folder.rglob("*.parquet")}


@pytest.fixture
def usual(write_job: JobWriter) -> dict[str, bytes]:
    """The files of the usual run."""
    found = files(write_job(RESULTS, stages=STAGES, parts=PARTS, folder="usual"))
    assert len(found) > 10
    return found


@pytest.mark.parametrize("seed", [1, 2])
def test_order_of_rows(write_job: JobWriter, usual: dict[str, bytes], seed: int) -> None:
    rng = random.Random(seed)
    stages, parts = (rng.sample(list(rows), len(rows)) for rows in (STAGES, PARTS))
    assert files(write_job(RESULTS, stages=stages, parts=parts)) == usual


def test_order_of_columns(write_job: JobWriter, usual: dict[str, bytes]) -> None:
    stages, parts = ([dict(reversed(list(row.items()))) for row in rows] for rows in (STAGES, PARTS))
    assert files(write_job(RESULTS, stages=stages, parts=parts)) == usual


@pytest.mark.parametrize("workers", [1, 2, 5])
def test_number_of_workers(write_job: JobWriter, usual: dict[str, bytes], workers: int) -> None:
    assert files(write_job(RESULTS, stages=STAGES, parts=PARTS), workers) == usual


@pytest.mark.parametrize("block", [7, 64, 1_000_000])
def test_size_of_blocks(
    write_job: JobWriter, usual: dict[str, bytes], monkeypatch: pytest.MonkeyPatch, block: int
) -> None:
    monkeypatch.setattr(blocks, "run", partial(blocks.run, block=block))
    assert files(write_job(RESULTS, stages=STAGES, parts=PARTS)) == usual


def test_a_second_run_and_a_cold_cache(
    write_job: JobWriter, usual: dict[str, bytes], monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    job = write_job(RESULTS, stages=STAGES, parts=PARTS)
    assert files(job) == usual
    monkeypatch.setenv("GAINASSAY_CACHE", str(tmp_path / "cold"))
    assert files(job) == usual


def test_text_in_csv_or_in_parquet(write_job: JobWriter, usual: dict[str, bytes]) -> None:
    job = write_job(RESULTS, tables='[stages]\nfrom = "stages.parquet"\n[parts]\nfrom = "parts.parquet"\n')
    pq.write_table(pa.Table.from_pylist(list(STAGES)), job.parent / "stages.parquet")
    pq.write_table(pa.Table.from_pylist(list(PARTS)), job.parent / "parts.parquet")
    assert files(job) == usual


def test_numbers_in_csv_or_in_parquet(write_job: JobWriter) -> None:
    rng = random.Random(3)
    stages = {
        "stage": [f"s{n}" for n in range(20)],
        "topology": ["inverting"] * 20,
        "r1": [rng.uniform(1e3, 1e4) for _ in range(20)],
        "r2": [rng.randrange(1000, 100_000) for _ in range(20)],
        "r_load": [None if n % 3 else 2000.5 for n in range(20)],
        "accuracy_ppm": [rng.uniform(10, 1000) for _ in range(20)],
    }
    parts = {"part": [f"p{n}" for n in range(20)], "a_ol_db_min": [rng.uniform(60, 140) for _ in range(20)]}
    tables = {name: pa.table(columns) for name, columns in (("stages", stages), ("parts", parts))}
    text = {name: [written(row) for row in table.to_pylist()] for name, table in tables.items()}
    in_csv = write_job(stages=text["stages"], parts=text["parts"], folder="csv")
    in_parquet = write_job(tables='[stages]\nfrom = "stages.parquet"\n[parts]\nfrom = "parts.parquet"\n')
    for name, table in tables.items():
        pq.write_table(table, in_parquet.parent / f"{name}.parquet")
    assert files(in_csv) == files(in_parquet)


def test_words_are_stored_as_a_dictionary(usual: dict[str, bytes]) -> None:
    """One with repeated words pyarrow stores as plain text, its missing cells as whatever lay in memory."""
    for name, content in usual.items():
        described = pq.read_metadata(pa.BufferReader(content)).row_group(0)
        columns = [described.column(place) for place in range(described.num_columns)]
        for column in columns:
            if column.path_in_schema in REPEATED:
                assert "RLE_DICTIONARY" in column.encodings, (name, column.path_in_schema)


def written(row: Mapping[str, object]) -> dict[str, str]:
    """A row as text; a number with all its digits."""
    return {name: "" if value is None else str(value) for name, value in row.items()}
