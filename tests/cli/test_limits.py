"""Operating limits as a user meets them: in a run, its tables and its manifest, and in an explanation."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pyarrow.parquet as pq
import pytest

from gainassay.contracts.limits import LIMITS

if TYPE_CHECKING:
    from conftest import CommandLineHere, JobWriter

STAGES = """stage,topology,r1,r2,r_load,accuracy_pct,v_out_peak,v_supply
light,inverting,1k,10k,,1,2,10
heavy,inverting,1k,10k,500,1,2,10
silent,inverting,1k,10k,500,1,,
"""

PARTS = """part,a_ol_min,r_id_min,r_o_max,v_swing_headroom_max,i_out_max
strong,1e6,1G,10,1 V,20 mA
weak,1e6,1G,10,1,2 mA
unstated,1e6,1G,10,,
"""


def run(here: CommandLineHere, job: Path) -> tuple[dict[str, Any], dict[tuple[str, str], dict[str, Any]]]:
    done = json.loads(here("screen", job, "--json").out)
    rows = pq.read_table(Path(done["folder"]) / "verdicts").to_pylist()
    return done, {(row["stage"], row["part"]): row for row in rows}


def test_a_run(here: CommandLineHere, write_job: JobWriter) -> None:
    done, rows = run(here, write_job("[results]\nmargins = true\n", stages=STAGES, parts=PARTS))
    failed = {pair: row for pair, row in rows.items() if row["verdict"] == "fail"}
    assert set(failed) == {("heavy", "weak")}
    row = failed["heavy", "weak"]
    assert (row["reason"], row["dominant_term"], row["dominant_ppm"]) == (
        "outside limit.output_current",
        "limit.output_current",
        None,
    )
    assert row["margin_output_current"] == pytest.approx(2e-3 - 2.0 / 500 - 2.0 / 10e3, rel=1e-12)
    assert row["margin_output_swing"] == 2.0
    assert rows["silent", "weak"]["margin_output_current"] is None
    assert "output_current" in rows["silent", "weak"]["not_checked"].split(", ")
    assert "output_current" not in row["not_checked"].split(", ")
    assert done["limits"]["output_current"] == {"outside": 1, "not_checked": 5}
    assert done["limits"]["output_swing"] == {"outside": 0, "not_checked": 5}
    assert done["limits"]["slew_rate"] == {"outside": 0, "not_checked": 9}
    assert done["dominant_terms"]["limit.output_current"] == 1


def test_the_summary_of_a_run(here: CommandLineHere, write_job: JobWriter) -> None:
    shown = here("screen", write_job(stages=STAGES, parts=PARTS)).out
    assert "output_current  1 outside  5 not checked" in shown
    assert (
        "not checked at all, for want of columns or numbers: input_range, slew_rate, full_power, stable_gain, "
        "supply_range, temperature_range"
    ) in shown


def test_without_their_columns_nothing_is_checked_and_nothing_else_changes(
    here: CommandLineHere, write_job: JobWriter
) -> None:
    _, with_limits = run(here, write_job(stages=STAGES, parts=PARTS))
    bare = [",".join(line.split(",")[:6]) for line in STAGES.splitlines()]
    job = write_job(stages="\n".join(bare), parts=PARTS, folder="bare")
    done, without = run(here, job)
    assert {**with_limits, ("heavy", "weak"): without["heavy", "weak"]} == without
    assert without["heavy", "weak"]["verdict"] == "pass"
    assert done["limits"] == {limit.name: {"outside": 0, "not_checked": 9} for limit in LIMITS}
    assert "not checked at all" in here("screen", job).out


def test_pairs_that_are_not_eligible_are_not_counted(here: CommandLineHere, write_job: JobWriter) -> None:
    rule = '[[eligible]]\npart = "i_out_max"\nat_least = "v_out_peak"\n'
    done, rows = run(here, write_job(rule, stages=STAGES, parts=PARTS))
    assert set(rows) == {("silent", part) for part in ("strong", "weak", "unstated")}
    assert done["limits"]["output_current"] == {"outside": 0, "not_checked": 3}
    assert done["dominant_terms"] == {"open_loop_gain": 3}


def test_an_explanation(here: CommandLineHere, write_job: JobWriter) -> None:
    job = write_job(stages=STAGES, parts=PARTS)
    shown = here("explain", job, "heavy", "weak").out
    assert shown.startswith("heavy with weak: fail, outside limit.output_current\n")
    assert "0.0042 A  at most   0.002 A  -0.0022 A  outside" in shown
    assert "not checked: the stage gives no frequency_hz; the part gives no slew_rate_v_us_min" in shown
    found = json.loads(here("explain", job, "silent", "weak", "--json").out)
    assert {check["name"] for check in found["limits"]} == {limit.name for limit in LIMITS}
    swing = next(check for check in found["limits"] if check["name"] == "output_swing")
    assert swing["state"] == "not checked: the stage gives no v_out_peak, v_supply"
    assert (swing["asked"], swing["margin"]) == (None, None)


def test_a_need_is_about_the_gain(here: CommandLineHere, write_job: JobWriter) -> None:
    weak = "\n".join(line for line in PARTS.splitlines() if line.startswith(("part", "weak")))
    job = write_job(stages=STAGES, parts=weak)
    assert json.loads(here("screen", job, "--json").out)["verdicts"]["fail"] == 1
    needs = {row["stage"]: row for row in json.loads(here("need", job, "--json").out)["stages"]}
    assert {row["outlook"] for row in needs.values()} == {"met"}
