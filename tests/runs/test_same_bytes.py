"""The verdict tables depend on nothing but the inputs: not on order, blocks, threads or the kind of file."""

from __future__ import annotations

import csv
import random
import sqlite3
from collections.abc import Mapping, Sequence
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING

import openpyxl
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
RESULTS = (
    "[assume]\nr_o = { typical_times = 2, value = 300 }\n"
    "[results]\nterms = true\nviews = true\nsamples = 100\nmargins = true\n"
)


def some_of(name: str, every: int) -> Table:
    """Some rows of a table of the sample set."""
    with (SAMPLE / name).open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))[::every]


STAGES: Table = [
    {**row, "v_out_peak": str(1 + place % 9), "v_supply": "20" if place % 3 else ""}
    for place, row in enumerate(some_of("stages.csv", 9))
]
PARTS: Table = [
    {**row, "v_swing_headroom_max": str(place % 7), "gain_stable_min": "5" if place % 2 else ""}
    for place, row in enumerate(some_of("parts.csv", 12))
]
"""With operating limits that some pairs keep, some do not, and some leave open."""


MOVING = """\
[[eligible]]
part = "grade"
at_least = "grade"
[judge]
guard_band_pct = 10
[assume]
a_ol = { typical_times = 0.5, hot_times = 0.5, change_pct = 30 }
r_o = { typical_times = 2, value = 300, hot_times = 1.5 }
[results]
terms = true
need = true
views = true
samples = 100
"""
MOVING_STAGES = """\
stage,topology,r1,r2,r3,r4,r_load,accuracy_pct,tol_pct,tc_ppm_k,r2_tc_ppm_k,drift_pct,t_min_c,t_max_c,\
network,r1_network,n_ratio_tol_pct,n_ratio_tc_ppm_k,m_ratio_tol_pct,calibrated,grade
plain,inverting,1k,10k,,,2k,0.5,0.1,,,,,,,,,,,,1
hot,inverting,2k,33k,,,,1,0.1,25,50,0.05,-40,85,,,,,,,2
hot-apart,non_inverting,2k,33k,,,,1,0.1,25,,0.05,40,85,,,,,,no,
tracks,inverting,1k,22k,,,5k,0.2,0.5,25,,,-20,60,n,,0.05,2,,,3
tracks-less,non_inverting,1k,22k,,,5k,0.2,0.5,25,,0.01,,,n,,0.2,,,,1
two,cascade_inverting,1k,4k7,2k2,10k,,0.7,0.2,15,,,-40,85,n,none,0.05,2,,,1
two-networks,difference,1k,10k,1k,10k,,0.3,0.2,,,,,,n,m,0.05,,0.1,,2
held,inverting,1k,10k,,,2k,0.4,1,25,,,-40,85,,,,,,yes,1
held-tracks,non_inverting,1k,10k,,,2k,0.2,1,25,,0.02,-40,85,n,,0.1,3,,yes,3
held-cool,follower,,,,,,0.002,,,,,,,,,,,,yes,2
nobody,inverting,1k,10k,,,2k,0.5,0.1,,,,,,,,,,,,9
"""
HOT: tuple[dict[str, str], ...] = (
    {},
    {"a_ol_change_pct": "5", "r_o_change_pct": "0"},
    {"a_ol_min_hot": "20000", "r_id_min_hot": "50k"},
)


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


@pytest.mark.parametrize("kind", ["xlsx", "sqlite", "folder", "mapped"])
def test_kind_of_source(write_job: JobWriter, usual: dict[str, bytes], kind: str) -> None:
    lines = {
        "xlsx": '[{name}]\nfrom = "{name}.xlsx"\n',
        "sqlite": '[{name}]\nfrom = "all.sqlite"\nquery = "select * from {name} order by random()"\n',
        "folder": '[{name}]\nfrom = "{name}/*.parquet"\n',
        "mapped": '[{name}]\nfrom = "{name}.txt"\ndelimiter = "|"\nencoding = "utf-16"\n'
        '[{name}.columns]\n"Their {key}" = "{key}"\n',
    }[kind]
    keys = {"stages": "stage", "parts": "part"}
    job = write_job(RESULTS, tables="".join(lines.format(name=name, key=key) for name, key in keys.items()))
    for name, rows in (("stages", STAGES), ("parts", PARTS)):
        WRITERS[kind](job.parent, name, pa.Table.from_pylist(list(rows)))
    assert files(job) == usual


def write_xlsx(home: Path, name: str, table: pa.Table) -> None:
    """A workbook."""
    book = openpyxl.Workbook(write_only=True)
    sheet = book.create_sheet()
    sheet.append(table.column_names)
    for row in table.to_pylist():
        sheet.append(list(row.values()))
    book.save(home / f"{name}.xlsx")


def write_sqlite(home: Path, name: str, table: pa.Table) -> None:
    """A table of an SQLite file."""
    with sqlite3.connect(home / "all.sqlite") as connection:
        connection.execute(f"create table {name} ({', '.join(table.column_names)})")
        marks = ", ".join("?" * table.num_columns)
        rows = [list(row.values()) for row in table.to_pylist()]
        connection.executemany(f"insert into {name} values ({marks})", rows)
    connection.close()


def write_folder(home: Path, name: str, table: pa.Table) -> None:
    """A folder of Parquet files."""
    (home / name).mkdir()
    for place, start in enumerate(range(0, table.num_rows, 7)):
        pq.write_table(table.slice(start, 7), home / name / f"{place:03d}.parquet")


def write_mapped(home: Path, name: str, table: pa.Table) -> None:
    """A text file with other delimiters, another encoding and another name of its key."""
    header = [f"Their {table.column_names[0]}", *table.column_names[1:]]
    lines = ["|".join(header), *("|".join(row.values()) for row in table.to_pylist())]
    (home / f"{name}.txt").write_bytes("\r\n".join(lines).encode("utf-16"))


WRITERS = {"xlsx": write_xlsx, "sqlite": write_sqlite, "folder": write_folder, "mapped": write_mapped}


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


def test_rules_leave_rows_out_and_change_no_other(write_job: JobWriter, usual: dict[str, bytes]) -> None:
    rng = random.Random(4)
    stages, parts = ([{**row, "grade": rng.choice("123")} for row in rows] for rows in (STAGES, PARTS))
    job = write_job(f'[[eligible]]\npart = "grade"\nat_least = "grade"\n{RESULTS}', stages=stages, parts=parts)
    asked, offered = {row["stage"]: row["grade"] for row in stages}, {row["part"]: row["grade"] for row in parts}
    found = files(job)
    assert set(found) == set(usual)
    for name in (name for name in usual if name.startswith("verdicts/")):
        before, after = (pq.read_table(pa.BufferReader(content[name])).to_pylist() for content in (usual, found))
        assert after == [row for row in before if offered[row["part"]] >= asked[row["stage"]]]


@pytest.mark.parametrize(("workers", "block", "per_chunk"), [(1, 7, 150), (5, 64, 40), (2, 1_000_000, 1_000_000)])
def test_what_moves_and_what_is_asked_for_does_not_depend_on_order_or_cuts(
    write_job: JobWriter, monkeypatch: pytest.MonkeyPatch, workers: int, block: int, per_chunk: int
) -> None:
    stages = list(csv.DictReader(MOVING_STAGES.splitlines()))
    parts = [
        {**row, "grade": str(place % 4), **dict.fromkeys({name for one in HOT for name in one}, ""), **HOT[place % 3]}
        for place, row in enumerate(PARTS)
    ]
    usual = values(files(write_job(MOVING, stages=stages, parts=parts, folder="usual")))
    assert {row["stage"] for row in usual} == {row["stage"] for row in stages} - {"nobody"}
    assert {row["verdict"] for row in usual} == {"pass", "fail", "unproven"}
    monkeypatch.setattr(blocks, "PAIRS_PER_CHUNK", per_chunk)
    monkeypatch.setattr(blocks, "run", partial(blocks.run, block=block))
    rng = random.Random(workers)
    shuffled = write_job(MOVING, stages=rng.sample(stages, len(stages)), parts=rng.sample(parts, len(parts)))
    assert values(files(shuffled, workers)) == usual


def values(found: Mapping[str, bytes]) -> list[dict[str, object]]:
    """All rows of the verdict tables, by stage and part, every number as its bits."""
    tables = [pq.read_table(pa.BufferReader(found[name])) for name in sorted(found) if name.startswith("verdicts/")]
    rows = [row for table in tables for row in table.to_pylist()]
    bits = [
        {name: value.hex() if isinstance(value, float) else value for name, value in row.items() if value is not None}
        for row in rows
    ]
    return sorted(bits, key=lambda row: (row["stage"], row["part"]))


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
