"""`gainassay form`: what a person, a document, a browser and a program get of it."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING
from xml.etree import ElementTree

import pytest

from gainassay.forms.library import library
from gainassay.report import formulas

if TYPE_CHECKING:
    from conftest import CommandLineHere, JobWriter

PAGE = Path(__file__).resolve().parents[2] / "schemas" / "topologies.md"


def test_text_gives_ideal_gain_gain_impedances_and_loop(here: CommandLineHere) -> None:
    out = here("form", "inverting").out
    for start in ("G = -r2/(r_source + r1)", "gain = ", "z_in = ", "z_out = ", "T = A/"):
        assert start in out


def test_numbers_stand_beside_their_ratios(here: CommandLineHere) -> None:
    out = here("form", "inverting", "--at", "r1=1k", "r2=100k", "A=100000").out
    assert "-99.899" in out
    lines = [line.split(maxsplit=1) for line in out.splitlines()]
    assert ["100", "r2/r1"] in lines


def test_no_number_is_undefined_for_any_topology(here: CommandLineHere) -> None:
    """At 0 Hz and with what is not given ideal: left out of the formula, not put into it as infinity."""
    for topology in library().values():
        if topology.name in ("differentiator", "non_inverting_ac"):
            continue
        several = len(topology.amplifiers) > 1
        gains = [f"A_{a.name}=1e5" for a in topology.amplifiers] if several else ["A=1e5"]
        given = [f"{e.name}=1k" for e in topology.elements if e.kind == "resistor" and e.absent == "error"]
        values = [v.replace("r_load=1k", "r_load=100") for v in given]
        out = here("form", topology.name, "--at", *values, *gains, "--json").out
        for formula in json.loads(out)["formulas"]:
            assert all(ratio["value"] is not None for ratio in formula["ratios"]), (topology.name, formula["symbol"])


def test_positive_feedback_is_told(here: CommandLineHere) -> None:
    values = ["r1=1k", "r2=1k", "r3=1k", "r4=3k", "r_load=1k", "A=1e5"]
    assert "the feedback positive" in here("form", "current_pump", "--at", *values).err


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--at", "r1=1k"], "no value is given for r2"),
        (["--at", "r1=1k", "r2"], "not of the form NAME=VALUE"),
        (["--at", "r1=1k", "r2=1x"], "r2 = '1x' is not a number"),
        (["--at", "r1=1k", "r2=-5"], "must be at least 0"),
        (["--at", "r1=1k", "r1=2k", "r2=5"], "r1 is given twice"),
        (["--at", "r1=1k", "r2=1k", "A=100dB"], "wanted is a plain number in V/V"),
        (["--at", "r1=1k", "rr2=5"], "did you mean 'r2'?"),
        (["r1=1k"], "one argument too many"),
        (["--as", "latex", "--at", "r1=1k", "r2=1k"], "print text or JSON"),
    ],
)
def test_numbers_that_cannot_be_used(here: CommandLineHere, arguments: list[str], message: str) -> None:
    assert message in here("form", "inverting", *arguments, status=2).err


def test_json_holds_trees_polynomials_and_hashes(here: CommandLineHere) -> None:
    found = json.loads(here("form", "follower", "--as", "json").out)
    assert found["topology"] == "follower"
    assert [formula["symbol"] for formula in found["formulas"]] == ["G", "gain", "z_in", "z_out", "T"]
    assert found["numerator"]
    assert found["denominator"]
    assert {len(sha256) for sha256 in found["sha256"].values()} == {64}


def test_mathml_is_well_formed(here: CommandLineHere) -> None:
    page = here("form", "inverting_t", "--as", "mathml").out
    for start in range(page.count("<math ")):
        piece = page.split("<math ")[start + 1].split("</math>")[0]
        ElementTree.fromstring(f"<math {piece}</math>")


def test_latex_has_a_display_for_each_formula(here: CommandLineHere) -> None:
    out = here("form", "inverting_t", "--as", "latex").out
    assert out.count(r"\[") == out.count(r"\]") == 5
    assert out.count("{") == out.count("}")


def test_shortened_for_a_job(here: CommandLineHere, write_job: JobWriter) -> None:
    job = write_job()
    out = here("form", "inverting", "--for", job).out
    assert "Verified over stages: 1, pairs: 1;" in out
    found = json.loads(here("form", "inverting", "--for", job, "--json").out)
    assert found["verified_deviation"]["share"] <= found["within"] == 0.1


def test_the_page_of_all_topologies_is_what_the_code_derives() -> None:
    """Made anew by: gainassay topologies --formulas > schemas/topologies.md"""
    assert PAGE.read_text(encoding="utf-8") == "\n".join(formulas.page(list(library().values()))) + "\n"
