"""`gainassay new`: a job that runs as it is written, and says every key that there is."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import TYPE_CHECKING

from gainassay.contracts import documents, tables

if TYPE_CHECKING:
    from conftest import CommandLineHere


def test_a_new_job_runs_at_once(here: CommandLineHere, tmp_path: Path) -> None:
    folder = tmp_path / "river" / "new"
    assert f"gainassay screen {folder / 'job.toml'}" in here("new", folder).out
    done = here("screen", folder / "job.toml")
    assert done.out.startswith("pairs     6\npass      3 ")
    assert "rejected" not in here("check", folder / "job.toml", "--fail-on", "rejected").err


def test_every_key_stands_in_a_new_job_and_its_value_there_is_its_default(
    here: CommandLineHere, tmp_path: Path
) -> None:
    here("new", tmp_path / "new")
    text = (tmp_path / "new" / "job.toml").read_text(encoding="utf-8")
    said = [line[2:] for line in text.splitlines() if line.startswith("# ") and " = " in line and "..." not in line]
    defaults = {key.path: key.default for key in documents.keys("job") if key.default}
    in_force = dict(line.split(" = ", 1) for line in said if line.split(" = ")[0] in defaults)
    assert in_force == {path: default for path, default in defaults.items() if not path.startswith("parts.")}
    assert all(tomllib.loads(f"{path} = {value}") for path, value in in_force.items())


def test_empty_tables_have_every_column(here: CommandLineHere, tmp_path: Path) -> None:
    here("new", tmp_path / "new")
    header = (tmp_path / "new" / "parts_empty.csv").read_text(encoding="utf-8")
    assert header == ",".join(column.name for column in tables.columns("parts")) + "\n"
    stages = (tmp_path / "new" / "stages_empty.csv").read_text(encoding="utf-8").strip().split(",")
    assert {"stage", "topology", "accuracy_pct", "r1", "r2", "r1_tol_pct"} <= set(stages)


def test_a_folder_that_is_there_is_left_alone(here: CommandLineHere, tmp_path: Path) -> None:
    assert "exists already" in here("new", tmp_path, status=2).err
    (tmp_path / "file").write_text("x")
    here("new", tmp_path / "file" / "new", status=2)
