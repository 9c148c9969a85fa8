"""The sample set: made by its generator to the byte, written out by `sample`, and an interesting mixture."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pyarrow.parquet as pq
import pytest

from gainassay import resources, service
from gainassay.forms.library import library
from gainassay.service import Done

if TYPE_CHECKING:
    from conftest import CommandLine, CommandLineHere

SAMPLE = resources.sample_sets() / "river_gauging"


def test_the_generator_makes_the_tables_to_the_byte(tmp_path: Path) -> None:
    subprocess.run([sys.executable, SAMPLE / "generate.py", tmp_path], check=True)
    for name in ("stages.csv", "parts.csv"):
        assert (tmp_path / name).read_bytes() == (SAMPLE / name).read_bytes()


def test_sample_writes_a_set_that_screens(gainassay: CommandLine, tmp_path: Path) -> None:
    written = gainassay("sample", tmp_path / "set").out
    assert written == f"Written to {tmp_path / 'set'}. Next: gainassay screen {tmp_path / 'set' / 'job.toml'}\n"
    found = json.loads(gainassay("screen", tmp_path / "set" / "job.toml", "--json").out)
    assert Path(found["folder"], "run.json").is_file()


def test_sample_writes_over_nothing(here: CommandLineHere, tmp_path: Path) -> None:
    (tmp_path / "set").mkdir()
    (tmp_path / "file").touch()
    assert "exists already" in here("sample", tmp_path / "set", status=2).err
    assert here("sample", tmp_path / "file" / "set", status=2).err
    assert list((tmp_path / "set").iterdir()) == []


@pytest.fixture(scope="module")
def done(tmp_path_factory: pytest.TempPathFactory) -> Done:
    """A run of the sample job."""
    home = tmp_path_factory.mktemp("sample")
    for name in ("job.toml", "stages.csv", "parts.csv"):
        (home / name).write_bytes((SAMPLE / name).read_bytes())
    return service.screen(service.prepare(home / "job.toml"))


@pytest.fixture(scope="module")
def manifest(done: Done) -> dict[str, Any]:
    """What its manifest says."""
    return dict(done.manifest)


def test_every_topology_with_a_gain_at_0_hz_is_used(done: Done) -> None:
    used = set(pq.read_table(done.folder / "stages.parquet", columns=["topology"])["topology"].to_pylist())
    assert used == set(library()) - {"differentiator", "non_inverting_ac"}


def test_every_verdict_is_common(manifest: dict[str, Any]) -> None:
    assert min(manifest["verdicts"].values()) > 0.1 * manifest["pairs"]


def test_every_kind_of_evidence_occurs(done: Done) -> None:
    found: set[str] = set()
    for path in done.folder.glob("verdicts/*.parquet"):
        found |= set(pq.read_table(path, columns=["evidence"])["evidence"].unique().to_pylist())
    assert found == {"guaranteed", "typical", "assumed", "missing"}


def test_every_kind_of_term_dominates_somewhere(manifest: dict[str, Any]) -> None:
    common = {"set_point", "open_loop_gain", "input_resistance", "output_resistance", "r1.tolerance", "r2.tolerance"}
    assert common <= set(manifest["dominant_terms"])


def test_a_few_stages_are_hopeless(done: Done) -> None:
    assert 0 < len(done.hopeless) < 0.1 * done.manifest["inputs"]["stages"]["used"]


@pytest.mark.frozen
def test_counts(manifest: dict[str, Any]) -> None:
    # Our own output of version 0.1.0.
    assert manifest["verdicts"] == {"pass": 83_193, "fail": 78_665, "unproven": 57_249}
    assert {n: (t["rows"], t["used"], t["rejected"]) for n, t in manifest["inputs"].items()} == {
        "stages": (285, 277, 8),
        "parts": (801, 791, 10),
    }
