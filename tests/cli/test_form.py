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
    assert ["100", "(r2 + r_o)/(r1 || r_id)"] in lines


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--at", "r1=1k"], "no value is given for r2"),
        (["--at", "r1=1k", "r2"], "not of the form NAME=VALUE"),
        (["--at", "r1=1k", "r2=1x"], "r2 = '1x' is not a number"),
        (["--at", "r1=1k", "r2=-5"], "must be at least 0"),
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
    assert "Verified over 1 stages, 1 pairs" in out
    found = json.loads(here("form", "inverting", "--for", job, "--json").out)
    assert found["verified_deviation"]["share"] <= found["within"] == 0.1


def test_the_page_of_all_topologies_is_what_the_code_derives() -> None:
    """Made anew by: gainassay topologies --formulas > schemas/topologies.md"""
    assert PAGE.read_text(encoding="utf-8") == "\n".join(formulas.page(list(library().values()))) + "\n"
