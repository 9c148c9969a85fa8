"""Root-sum-square and Monte Carlo as a user asks for them and sees them."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pyarrow.parquet as pq
import pytest

from gainassay.screen.monte_carlo import SEED

if TYPE_CHECKING:
    from conftest import CommandLineHere, JobWriter

COLUMNS = ["error_mean_ppm", "error_u_ppm", "error_rss_ppm", "yield_mc", "yield_mc_u"]

STAGES = """stage,topology,r1,r2,r3,r4,r_load,accuracy_pct,tol_pct
keeps,inverting,1k,10k,,,,2,0.1
misses,inverting,1k,10k,,,,1.5,1
unbounded,current_pump,1k,1k,1k,1k,1M,1,1
"""

PART = "part,a_ol_min,r_id_min,r_o_max\namp,100000,1G,10\n"


def rows(run: Path) -> dict[str, dict[str, Any]]:
    return {row["stage"]: row for row in pq.read_table(run / "verdicts").to_pylist()}


@pytest.mark.parametrize(
    ("said", "option", "shown"),
    [
        ("", [], False),
        ("views = true", [], True),
        ("", ["--views"], True),
        ("views = true", ["--no-views"], False),
    ],
)
def test_views_are_shown_on_request(
    here: CommandLineHere, write_job: JobWriter, said: str, option: list[str], shown: bool
) -> None:
    job = write_job(f"[results]\nsamples = 400\n{said}\n", stages=STAGES, parts=PART)
    done = json.loads(here("screen", job, *option, "--json").out)
    schema = pq.read_schema(next(Path(done["folder"]).glob("verdicts/*.parquet")))
    assert [name for name in schema.names if name in COLUMNS] == (COLUMNS if shown else [])
    assert done["views"] == ({"coverage_factor": 2.0, "samples": 400, "seed": SEED} if shown else None)


def test_a_yield_is_certain_where_the_worst_case_is_inside(here: CommandLineHere, write_job: JobWriter) -> None:
    job = write_job("[results]\nviews = true\n", stages=STAGES, parts=PART)
    found = rows(Path(json.loads(here("screen", job, "--json").out)["folder"]))
    assert (found["keeps"]["yield_mc"], found["keeps"]["yield_mc_u"]) == (1.0, 0.0)
    assert 0.5 < found["misses"]["yield_mc"] < 1.0
    assert 0.0 < found["misses"]["yield_mc_u"] < 0.02
    assert found["unbounded"]["error_worst_ppm"] is None
    assert {found["unbounded"][name] for name in COLUMNS} == {None}


def test_an_explanation_shows_both_views(here: CommandLineHere, write_job: JobWriter) -> None:
    job = write_job("[results]\nviews = true\n", stages=STAGES, parts=PART)
    row = rows(Path(json.loads(here("screen", job, "--json").out)["folder"]))["misses"]
    seen = json.loads(here("explain", job, "misses", "amp", "--json").out)["views"]
    figures = ("mean_ppm", "u_ppm", "stated_ppm", "yield_mc", "yield_mc_u")
    assert [seen[name] for name in figures] == [row[name] for name in COLUMNS]
    assert sum(share["share"] for share in seen["shares"]) == pytest.approx(1.0, rel=1e-12)
    assert {share["name"] for share in seen["shares"]} == {"r1.tolerance", "r2.tolerance", "a_ol", "r_id", "r_o"}
    assert abs(seen["sampled_u_ppm"] / seen["u_ppm"] - 1.0) < 0.05
    shown = here("explain", job, "misses", "amp").out
    assert "from 2,000 samples" in shown
    assert "share of u^2" in shown
    assert "since the worst case is" in here("explain", job, "keeps", "amp").out


def test_an_explanation_without_a_finite_bound_has_no_views(here: CommandLineHere, write_job: JobWriter) -> None:
    job = write_job(stages=STAGES, parts=PART)
    seen = json.loads(here("explain", job, "unbounded", "amp", "--json").out)["views"]
    assert seen["shares"] == []
    assert {seen[name] for name in ("mean_ppm", "u_ppm", "stated_ppm", "inside", "yield_mc", "sampled_u_ppm")} == {None}
    assert "not found where the gain has no finite bound" in here("explain", job, "unbounded", "amp").out


@pytest.mark.parametrize("samples", ["99", "100001", "1.5"])
def test_a_number_of_samples_that_cannot_be_used(here: CommandLineHere, write_job: JobWriter, samples: str) -> None:
    message = here("screen", write_job(f"[results]\nsamples = {samples}\n"), status=2).err
    assert "a whole number from 100 to 100000" in message


def test_a_calibrated_stage_has_no_views_and_explain_says_so(here: CommandLineHere, write_job: JobWriter) -> None:
    stages = "stage,topology,r1,r2,accuracy_pct,tol_pct,calibrated\ntrimmed,inverting,1k,10k,2,0.1,yes\n"
    job = write_job("[results]\nviews = true\n", stages=stages, parts=PART)
    found = rows(Path(json.loads(here("screen", job, "--json").out)["folder"]))
    assert {found["trimmed"][name] for name in COLUMNS} == {None}
    out = here("explain", job, "trimmed", "amp").out
    assert "Calibrated at 25 degrees Celsius: only what moves afterwards counts" in out
    assert "Root-sum-square and Monte Carlo are not found for calibrated stages" in out
    assert "from 2,000 samples" not in out
