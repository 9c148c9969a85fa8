"""Stability as a user asks for it and sees it: columns, verdicts, the explanation and its picture."""

from __future__ import annotations

import importlib.util
import json
from pathlib import Path
from typing import TYPE_CHECKING, Any
from xml.etree import ElementTree

import pyarrow.parquet as pq
import pytest

if TYPE_CHECKING:
    from conftest import CommandLineHere, Ended, JobWriter

COLUMNS = ["crossover_hz", "phase_margin_deg", "gain_margin_db"]
STAGES = "stage,topology,r1,r2,accuracy_pct\nlevel,inverting,1k,10k,1\nbuffer,follower,,,0.00001\n"
PARTS = """part,a_ol_min,r_id_min,r_o_max,gbw_min,gbw_typ,f_second_pole_hz
amp-both,1e6,1G,1,5M,10M,4M
amp-least,1e6,1G,1,10M,,4M
amp-no-gbw,1e6,1G,1,,,4M
amp-no-pole,1e6,1G,1,,10M,
"""
RESULTS = "[results]\nstability = true\n"


def rows(ended: Ended) -> dict[tuple[str, str], dict[str, Any]]:
    table = pq.read_table(Path(json.loads(ended.out)["folder"]) / "verdicts").to_pylist()
    return {(row["stage"], row["part"]): row for row in table}


@pytest.mark.parametrize(("said", "shown"), [("", False), (RESULTS, True)])
def test_columns_are_shown_on_request(here: CommandLineHere, write_job: JobWriter, said: str, shown: bool) -> None:
    found = rows(here("screen", write_job(said, stages=STAGES, parts=PARTS), "--json"))["level", "amp-both"]
    assert [name for name in found if name in COLUMNS] == (COLUMNS if shown else [])


def test_margins_of_each_pair(here: CommandLineHere, write_job: JobWriter) -> None:
    found = rows(here("screen", write_job(RESULTS, stages=STAGES, parts=PARTS), "--json"))
    margins = {part: [found["level", part][name] for name in COLUMNS] for _, part in found}
    crossover, phase, gain = margins["amp-both"]
    assert crossover == pytest.approx(10e6 / 11.0, rel=0.03)
    assert 70.0 < phase < 85.0
    assert gain is None
    assert margins["amp-least"] == margins["amp-both"]
    assert margins["amp-no-gbw"] == [None, None, None]
    assert margins["amp-no-pole"][1] == pytest.approx(90.0, abs=0.01)


def judged(here: CommandLineHere, write_job: JobWriter, least: str) -> dict[tuple[str, str], tuple[str, str, str]]:
    job = write_job(f"[judge]\nphase_margin_min_deg = {least}\n", stages=STAGES, parts=PARTS)
    found = rows(here("screen", job, "--json"))
    return {pair: (row["verdict"], row["reason"], row["dominant_term"]) for pair, row in found.items()}


BELOW = ("fail", "phase margin below the limit", "limit.phase_margin")


def test_a_least_phase_margin_decides(here: CommandLineHere, write_job: JobWriter) -> None:
    loose, strict = (judged(here, write_job, least) for least in ("60", "89.9"))
    assert loose["level", "amp-both"][:2] == ("pass", "inside the limit")
    assert strict["level", "amp-both"] == BELOW
    assert loose["level", "amp-no-gbw"][:2] == (
        "unproven",
        "inside the limit, but the phase margin is not checked: gbw missing",
    )
    assert loose["level", "amp-no-pole"][:2] == (
        "unproven",
        "inside the limit, but the phase margin leaves out a second pole: f_second_pole_hz missing",
    )
    assert judged(here, write_job, "90")["level", "amp-no-pole"][0] == "unproven"
    # Outside its accuracy and below the margin: the margin is told; without a margin the error is.
    assert loose["buffer", "amp-both"] == BELOW
    assert loose["buffer", "amp-no-gbw"][:2] == ("fail", "outside the limit")


def test_the_margin_itself_is_enough_and_no_more(here: CommandLineHere, write_job: JobWriter) -> None:
    margin = rows(here("screen", write_job(RESULTS, stages=STAGES, parts=PARTS), "--json"))["level", "amp-both"]
    exact = margin["phase_margin_deg"]
    assert judged(here, write_job, repr(exact))["level", "amp-both"][0] == "pass"
    assert judged(here, write_job, repr(exact + 1e-12))["level", "amp-both"] == BELOW


def test_counts_name_the_limit(here: CommandLineHere, write_job: JobWriter) -> None:
    job = write_job("[judge]\nphase_margin_min_deg = 89.9\n", stages=STAGES, parts=PARTS)
    assert json.loads(here("screen", job, "--json").out)["dominant_terms"]["limit.phase_margin"] == 4


def test_a_second_pole_without_a_column_is_not_modelled(here: CommandLineHere, write_job: JobWriter) -> None:
    parts = "part,a_ol_min,r_id_min,r_o_max,gbw_typ\namp,1e6,1G,1,10M\n"
    job = write_job("[judge]\nphase_margin_min_deg = 60\n", stages=STAGES, parts=parts)
    ended = here("screen", job, "--json")
    assert rows(ended)["level", "amp"]["verdict"] == "pass"
    assert "there is no column for f_second_pole_hz; it is not modelled" in ended.err
    without = here("screen", write_job(RESULTS, stages=STAGES), "--json")
    assert "no part has a gbw_typ or gbw_min; no stability is checked" in without.err
    assert "second_pole" not in here("screen", write_job(stages=STAGES), "--json").err


@pytest.mark.parametrize("least", ["0", "90.1", '"60"'])
def test_a_least_phase_margin_that_cannot_be_used(here: CommandLineHere, write_job: JobWriter, least: str) -> None:
    job = write_job(f"[judge]\nphase_margin_min_deg = {least}\n")
    assert "a number above 0 and up to 90: the least phase margin" in here("check", job, status=2).err


def test_crossed_bandwidths_are_rejected(here: CommandLineHere, write_job: JobWriter) -> None:
    parts = PARTS + "amp-crossed,1e6,1G,1,10M,5M,4M\n"
    message = here("explain", write_job(stages=STAGES, parts=parts), "level", "amp-crossed", status=2).err
    assert "gbw_min, gbw_typ" in message
    assert "'10M, 5M' the minimum lies above the typical figure" in message


def test_an_explanation_always_shows_stability(here: CommandLineHere, write_job: JobWriter) -> None:
    job = write_job("[judge]\nphase_margin_min_deg = 60\n", stages=STAGES, parts=PARTS)
    shown = here("explain", job, "level", "amp-both").out
    assert "Stability, with gbw 10 MHz, second pole 4 MHz and the nominal figures; a pass needs 60 deg" in shown
    seen = json.loads(here("explain", job, "level", "amp-least", "--json").out)["stability"]
    assert seen["loops"][0]["crossovers"] == 1
    assert "not checked: gbw missing" in here("explain", job, "level", "amp-no-gbw").out
    assert "f_second_pole_hz missing" in here("explain", job, "level", "amp-no-pole").out
    failed = json.loads(here("explain", job, "buffer", "amp-both", "--json").out)
    assert (failed["verdict"], failed["reason"], failed["dominant_term"]) == BELOW


def test_the_loops_of_all_amplifiers_are_shown(here: CommandLineHere, write_job: JobWriter) -> None:
    stages = "stage,topology,r1,r2,r3,r4,accuracy_pct\nlevel,composite,1k,99k,1k,9k,1\n"
    shown = here("explain", write_job(stages=stages, parts=PARTS), "level", "amp-both").out
    assert "each amplifier's loop with all others closed" in shown


@pytest.mark.parametrize("ending", ["svg", "png"])
def test_a_plot_has_the_same_bytes_each_time(here: CommandLineHere, write_job: JobWriter, ending: str) -> None:
    job = write_job(stages=STAGES, parts=PARTS)
    files = [job.parent / f"{name}.{ending}" for name in ("first", "second")]
    for file in files:
        here("explain", job, "level", "amp-both", "--plot", file)
    first, second = (file.read_bytes() for file in files)
    assert first == second
    assert len(first) < 200_000
    assert not list(job.parent.glob(".*"))


def test_a_plot_says_what_it_shows_to_those_who_do_not_see_it(here: CommandLineHere, write_job: JobWriter) -> None:
    stages = STAGES + "<&$x$--\u6c34,inverting,1k,10k,1\n"
    job = write_job(stages=stages, parts=PARTS)
    file = job.parent / "plot.svg"
    here("explain", job, "<&$x$--\u6c34", "amp-both", "--plot", file)
    root = ElementTree.fromstring(file.read_bytes())
    space = "{http://www.w3.org/2000/svg}"
    assert root.get("role") == "img"
    assert root.findtext(f"{space}title") == "<&$x$--\u6c34 with amp-both"
    assert "phase margin" in str(root.findtext(f"{space}desc"))


def test_plots_that_cannot_be_drawn(
    here: CommandLineHere, write_job: JobWriter, monkeypatch: pytest.MonkeyPatch
) -> None:
    job = write_job(stages=STAGES, parts=PARTS)
    here_is = job.parent
    plot = here_is / "plot.svg"
    assert "no gbw_typ or gbw_min" in here("explain", job, "level", "amp-no-gbw", "--plot", plot, status=2).err
    message = here("explain", job, "level", "amp-both", "--plot", here_is / "plot.pdf", status=2).err
    assert "the name must end with .svg or .png" in message
    nowhere = here_is / "nowhere" / "plot.svg"
    assert "there is no folder" in here("explain", job, "level", "amp-both", "--plot", nowhere, status=2).err
    there = importlib.util.find_spec
    monkeypatch.setattr(
        "gainassay.report.drawing.find_spec", lambda name: None if name == "matplotlib" else there(name)
    )
    message = here("explain", job, "level", "amp-both", "--plot", plot, status=2).err
    assert "install 'gainassay[plot]'" in message
    assert not plot.exists()
