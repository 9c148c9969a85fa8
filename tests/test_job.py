"""The job file: two lines are enough, and its paths start where it lies."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import pytest

from gainassay import job as jobs
from gainassay.job import Heading, Source, StandIn

if TYPE_CHECKING:
    from conftest import JobWriter


def test_the_shortest_job(write_job: JobWriter) -> None:
    path = write_job()
    job = jobs.read(path)
    assert job.stages == Source("stages", str(path.parent / "stages.csv"))
    assert job.parts == Source("parts", str(path.parent / "parts.csv"))
    assert (job.topologies, dict(job.assume)) == ((), {})
    assert job.results == jobs.Results(path.parent / "runs", "all", ("parquet",), False, False, False, 2000, False)


def test_everything_a_job_may_say(write_job: JobWriter) -> None:
    path = write_job(
        """
[assume]
a_ol = { typical_times = 0.5 }
r_o = { typical_times = 2, value = 300 }
[results]
folder = "../elsewhere"
rows = "not passing"
formats = ["csv", "parquet"]
terms = true
need = true
views = true
samples = 500
margins = true
""",
        tables='topologies = ["own/one.toml"]\n[stages]\nfrom = "a.parquet"\n[parts]\nfrom = "/b.csv"\n',
    )
    job = jobs.read(path)
    assert job.topologies == (path.parent / "own/one.toml",)
    assert (job.stages.at, job.parts.at) == (str(path.parent / "a.parquet"), "/b.csv")
    assert job.assume == {"a_ol": StandIn(typical_times=0.5), "r_o": StandIn(2, 300)}
    assert job.results == jobs.Results(
        path.parent / "../elsewhere", "not passing", ("csv", "parquet"), True, True, True, 500, True
    )


def test_paths_start_where_the_job_lies(write_job: JobWriter, monkeypatch: pytest.MonkeyPatch) -> None:
    path = write_job()
    monkeypatch.chdir(path.parent.parent)
    assert jobs.read(Path("job/job.toml")).stages.at == "job/stages.csv"


def test_a_job_keeps_its_document_for_the_manifest(write_job: JobWriter) -> None:
    assert jobs.read(write_job("[results]\nterms = true\n")).document == {
        "stages": {"from": "stages.csv"},
        "parts": {"from": "parts.csv"},
        "results": {"terms": True},
    }


def test_what_a_job_says_of_a_table(write_job: JobWriter) -> None:
    path = write_job(
        """
[parts]
from = "$RIVER_PARTS"
query = "select * from parts"
decimal = ","
[parts.columns]
"Part number" = "part"
"Zin (MOhm)" = { is = "r_id_typ", unit = "Mohm" }
r_o_max = { value = "300" }
""",
        tables='[stages]\nfrom = "postgresql://gauge/river"\ntable = "stages"\n',
    )
    job = jobs.read(path)
    assert job.stages == Source("stages", "postgresql://gauge/river", table="stages")
    assert job.parts == Source(
        "parts",
        "$RIVER_PARTS",
        decimal=",",
        query="select * from parts",
        columns=(
            Heading("part", "Part number"),
            Heading("r_id_typ", "Zin (MOhm)", "Mohm"),
            Heading("r_o_max", value="300"),
        ),
    )
