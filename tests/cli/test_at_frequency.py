"""Stages at a frequency from the tables to the verdicts."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pyarrow.parquet as pq
import pytest

from gainassay import service

if TYPE_CHECKING:
    from conftest import CommandLineHere, JobWriter

STAGE = {"stage": "s", "topology": "non_inverting", "r1": "1k", "r2": "9k", "accuracy_pct": "1", "frequency_hz": "10k"}
PART = {"part": "p", "a_ol_min": "1e5", "r_id_min": "1M", "r_o_max": "100", "gbw_min": "1M", "gbw_typ": "3M"}
COUPLED = {"stage": "c", "topology": "differentiator", "c1": "10n", "r1": "100", "r2": "10k", "accuracy_pct": "5"}


def verdict(job: Path) -> dict[str, Any]:
    """The only row of a job's verdict table."""
    return dict(pq.read_table(service.screen(service.prepare(job)).folder / "verdicts").to_pylist()[0])


def test_verdict(write_job: JobWriter) -> None:
    row = verdict(write_job("[results]\nterms = true\n", stages=[STAGE], parts=[PART]))
    assert (row["verdict"], row["worst_case"], row["dominant_term"]) == ("pass", "vertex estimate", "bandwidth")
    terms = [value for name, value in row.items() if name.startswith("term_") and value is not None]
    assert sum(terms) == pytest.approx(row["error_worst_ppm"], rel=1e-12)
    assert row["phase_error_deg"] == pytest.approx(-5.7, abs=0.1)


def test_at_0_hz_the_worst_case_is_exact(write_job: JobWriter) -> None:
    row = verdict(write_job(stages=[STAGE | {"frequency_hz": ""}], parts=[PART]))
    assert (row["worst_case"], row["phase_error_deg"]) == ("exact", None)


def test_without_bandwidth_nothing_passes(write_job: JobWriter) -> None:
    row = verdict(write_job(stages=[STAGE], parts=[PART | {"gbw_min": "", "gbw_typ": ""}]))
    assert (row["verdict"], row["evidence"], row["leans_on"]) == ("unproven", "missing", "gbw missing")


def test_stand_in_for_bandwidth(write_job: JobWriter) -> None:
    job = write_job("[assume]\ngbw = { typical_times = 0.5 }\n", stages=[STAGE], parts=[PART | {"gbw_min": ""}])
    assert verdict(job)["leans_on"] == "gbw typical"


def test_limited_phase(write_job: JobWriter) -> None:
    row = verdict(write_job(stages=[STAGE | {"phase_accuracy_deg": "5"}], parts=[PART]))
    assert (row["verdict"], row["reason"]) == ("fail", "outside the phase limit")
    row = verdict(write_job(stages=[STAGE | {"phase_accuracy_deg": "6"}], parts=[PART], folder="wide"))
    assert row["verdict"] == "pass"
    more = "[judge]\nguard_band_pct = 20\n"
    row = verdict(write_job(more, stages=[STAGE | {"phase_accuracy_deg": "6"}], parts=[PART], folder="guarded"))
    assert (row["verdict"], row["reason"]) == ("fail", "inside the phase limit, but in its guard band")


def test_a_stage_without_gain_at_0_hz_works_at_a_frequency(here: CommandLineHere, write_job: JobWriter) -> None:
    job = write_job(stages=[COUPLED | {"frequency_hz": "1k"}], parts=[PART])
    assert verdict(job)["gain_ideal"] == pytest.approx(0.6283061, rel=1e-6)
    assert "At 1 kHz" in here("explain", job, "c", "p").out
    assert json.loads(here("explain", job, "c", "p", "--json").out)["frequency_hz"] == 1000.0
    assert "needs are not found" in here("need", job).out
    assert "work at a frequency" in here("form", "differentiator", "--for", job, status=2).err


@pytest.mark.parametrize(
    ("cells", "words"),
    [
        ({"calibrated": "yes"}, "a calibrated stage is screened at 0 Hz only"),
        ({"frequency_hz": "", "phase_accuracy_deg": "1"}, "there is no phase at 0 Hz; fill frequency_hz"),
        ({"frequency_hz": "0"}, "above 0"),
    ],
)
def test_rejected(here: CommandLineHere, write_job: JobWriter, cells: dict[str, str], words: str) -> None:
    job = write_job(stages=[STAGE | cells], parts=[PART])
    assert words in here("check", job, status=2).err
