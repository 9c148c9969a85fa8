"""`gainassay need`, and the need columns of the verdict tables: from a job's files to files."""

from __future__ import annotations

import csv
import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow.csv as pacsv
import pyarrow.parquet as pq
import pytest

from gainassay import service
from gainassay.contracts import tables
from gainassay.forms.departures import BASIC, DEPARTURES
from gainassay.runs.reading import verdicts
from gainassay.screen import blocks

if TYPE_CHECKING:
    from conftest import CommandLineHere, JobWriter

STAGES = """stage,topology,r1,r2,r_load,accuracy_pct,tol_pct,target_gain
easy,inverting,1k,10k,2k,1,0.1,
hard,inverting,1k,100k,,0.01,,
loose,non_inverting,1k,9k,,0.1,1,
off,non_inverting,1k,9k,,0.1,1,10.5
plain,follower,,,,0.1,,
"""

PARTS = """part,a_ol_min,a_ol_typ,r_id_min,r_o_max
good,100000,,1M,100
poor,5000,,100k,300
typical,,200000,10M,50
"""

ALL_FIGURES = """part,a_ol_min,a_ol_typ,r_id_min,r_o_max,r_icm_min,cmrr_db_min
good,100000,,1M,100,1G,120
poor,5000,,100k,300,100M,90
typical,,200000,10M,50,1G,120
"""


def rows_of(out: str) -> dict[str, dict[str, Any]]:
    return {row["stage"]: row for row in json.loads(out)["stages"]}


def test_from_a_job_to_its_lines(here: CommandLineHere, write_job: JobWriter) -> None:
    out = here("need", write_job(stages=STAGES, parts=PARTS)).out
    found = {line.split()[0]: line.split() for line in out.splitlines() if line.startswith("  ")}
    assert found["easy"][1] == "met"
    assert found["hard"][1] == "unmet"
    assert "  loose: resistors alone exceed the limit by" in out
    assert "no part can pass; resistors within" in out
    assert "% in place of 1 % would do with good" in out
    assert "  off: resistors alone exceed the limit by" in out
    assert "even exact ones do: its target gain is too far from its ideal gain" in out
    assert "sign-off decide" in out


def test_a_need_written_into_the_parts_table_passes_and_a_digit_worse_fails(
    here: CommandLineHere, write_job: JobWriter
) -> None:
    row = rows_of(here("need", write_job(stages=STAGES, parts=PARTS), "--json").out)["easy"]
    assert row["outlook"] == "met"
    assert row["part"] == "good"
    has = {"part": "own", "a_ol_min": row["has_a_ol"], "r_id_min": row["has_r_id"], "r_o_max": row["has_r_o"]}
    own = []
    for departure in BASIC:
        need = row[f"need_{departure.quantity}"]
        worse = need * (0.9999 if departure.reciprocal else 1.0001)
        own += [
            {**has, "part": f"{departure.quantity} just", departure.limit_column: repr(need)},
            {**has, "part": f"{departure.quantity} worse", departure.limit_column: repr(worse)},
        ]
    job = write_job(stages=STAGES.splitlines()[0] + "\n" + STAGES.splitlines()[1] + "\n", parts=own, folder="own")
    here("screen", job)
    found = verdicts(next((job.parent / "runs").iterdir()))
    assert dict(zip(found["part"], found["verdict"], strict=True)) == {
        part["part"]: "pass" if part["part"].endswith("just") else "fail" for part in own
    }


def test_the_floor_is_that_of_a_part_ideal_otherwise(here: CommandLineHere, write_job: JobWriter) -> None:
    """A follower's error is -1/(1 + A_OL)."""
    row = rows_of(here("need", write_job(stages=STAGES, parts=PARTS), "--json").out)["plain"]
    assert row["floor_a_ol"] == pytest.approx(999.0, rel=1e-9)
    assert row["need_a_ol"] >= row["floor_a_ol"]


def test_every_column_is_as_its_schema_says(here: CommandLineHere, write_job: JobWriter, tmp_path: Path) -> None:
    job, file = write_job(stages=STAGES, parts=ALL_FIGURES), tmp_path / "need.parquet"
    shown = rows_of(here("need", job, "--to", file, "--json").out)
    written = pq.read_table(file)
    described = tables.columns("need")
    assert written.column_names == [column.name for column in described]
    assert [field.metadata[b"unit"].decode() for field in written.schema] == [column.unit for column in described]
    assert {row["stage"]: row for row in written.to_pylist()} == shown
    for departure in DEPARTURES:
        assert {f"has_{departure.quantity}", f"need_{departure.quantity}"} <= set(written.column_names)


def test_a_table_is_written_whole_in_place_of_the_old_one(
    here: CommandLineHere, write_job: JobWriter, tmp_path: Path
) -> None:
    file = tmp_path / "need.csv"
    file.write_text("old", encoding="utf-8")
    job = write_job(stages=STAGES, parts=PARTS)
    here("need", job, "--to", file)
    assert pacsv.read_csv(file).num_rows == 5
    assert sorted(path.name for path in tmp_path.iterdir()) == ["job", "need.csv"]
    assert not (job.parent / "runs").exists()


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("need.xls", "the name must end with .csv or .parquet"),
        ("none/need.csv", "cannot be written: there is no folder"),
        (".csv", "the name must end with .csv or .parquet"),
        ("folder.csv", "cannot be written: Is a directory"),
    ],
)
def test_a_file_that_cannot_be_written(
    here: CommandLineHere, write_job: JobWriter, tmp_path: Path, name: str, words: str
) -> None:
    (tmp_path / "folder.csv").mkdir()
    done = here("need", write_job(stages=STAGES, parts=PARTS), "--to", tmp_path / name, status=2)
    assert done.out == ""
    assert sorted(path.name for path in tmp_path.iterdir()) == ["folder.csv", "job"]
    assert f"{tmp_path / name}: {words}" in done.err


@pytest.mark.parametrize(
    ("condition", "status", "words"),
    [("hopeless", 3, "2 hopeless"), ("unmet", 3, "1 unmet"), ("rejected", 0, "")],
)
def test_fail_on(here: CommandLineHere, write_job: JobWriter, condition: str, status: int, words: str) -> None:
    done = here("need", write_job(stages=STAGES, parts=PARTS), "--fail-on", condition, status=status)
    assert words in done.err
    assert done.out.startswith("met       2  a part passes\n")


def test_a_stage_that_leans_on_typical_figures(here: CommandLineHere, write_job: JobWriter) -> None:
    parts = "\n".join(line for line in PARTS.splitlines() if not line.startswith(("good", "poor"))) + "\n"
    row = rows_of(here("need", write_job(stages=STAGES, parts=parts), "--json").out)["easy"]
    assert (row["outlook"], row["part"]) == ("unproven", "typical")
    assert row["has_a_ol"] == pytest.approx(200000.0, rel=1e-12)


def test_a_stage_that_no_part_may_serve(here: CommandLineHere, write_job: JobWriter) -> None:
    stages, parts = (
        "\n".join(f"{line},{'channels' if not place else count}" for place, line in enumerate(rows.splitlines())) + "\n"
        for rows, count in ((STAGES, 2), (PARTS, 1))
    )
    stages = stages.replace("off,non_inverting,1k,9k,,0.1,1,10.5,2", "off,non_inverting,1k,9k,,0.1,1,10.5,1")
    job = write_job('[[eligible]]\npart = "channels"\nat_least = "channels"\n', stages=stages, parts=parts)
    row = rows_of(here("need", job, "--json").out)["easy"]
    assert (row["outlook"], row["part"], row["need_a_ol"], row["has_a_ol"]) == ("unmet", "", None, None)
    alone = rows_of(here("need", write_job(stages=STAGES, parts=PARTS, folder="alone"), "--json").out)["easy"]
    assert row["floor_a_ol"] == alone["floor_a_ol"]
    assert "  easy: no part is eligible, or none has a finite bound" in here("need", job).out


def test_an_unusable_job(here: CommandLineHere, write_job: JobWriter) -> None:
    done = here("need", write_job(stages="stage,topology\na,inverting\n"), status=2)
    assert "a column 'accuracy_pct' or 'accuracy_ppm' is missing" in done.err


def test_verdict_tables_hold_needs_on_request(
    here: CommandLineHere, write_job: JobWriter, monkeypatch: pytest.MonkeyPatch
) -> None:
    names = [f"need_{departure.quantity}" for departure in DEPARTURES]
    assert [column.name for column in tables.columns("verdicts") if column.name.startswith("need_")] == names
    job = write_job("[results]\nneed = true\n[judge]\nguard_band_pct = 10\n", stages=STAGES, parts=ALL_FIGURES)
    whole = verdicts(service.screen(service.prepare(job)).folder)
    assert list(whole.columns[-5:]) == names
    ratio = whole["need_a_ol"] / whole["part"].astype(str).map({"good": 1e5, "poor": 5e3, "typical": 2e5})
    is_inside = whole["verdict"] != "fail"
    assert (ratio[is_inside] <= 1.0).all()
    assert not (ratio[~is_inside] <= 1.0).any()
    best = rows_of(here("need", job, "--json").out)
    for stage, row in best.items():
        own = whole[(whole["stage"] == stage) & (whole["part"] == row["part"])].iloc[0]
        for name in names:
            assert own[name] == row[name] or (row[name] is None and np.isnan(own[name]))
    monkeypatch.setattr(blocks, "PAIRS_PER_CHUNK", 2)
    cut = verdicts(service.screen(service.prepare(job), workers=2).folder)
    assert cut[names].to_numpy().tobytes() == whole[names].to_numpy().tobytes()


def test_a_csv_of_needs_holds_their_digits(write_job: JobWriter) -> None:
    job = write_job('[results]\nneed = true\nformats = ["csv"]\n', stages=STAGES, parts=PARTS)
    folder = service.screen(service.prepare(job)).folder
    with next((folder / "verdicts").glob("*follower.csv")).open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert float(rows[0]["need_a_ol"]) >= 999.0
