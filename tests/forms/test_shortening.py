"""Dropping pieces of a formula: what may go, what stays, and that nothing is claimed without its measure."""

from __future__ import annotations

import pytest

from gainassay.forms.evaluation import value
from gainassay.forms.expression import Expression
from gainassay.forms.library import library
from gainassay.forms.meaningful import derive
from gainassay.forms.render import text
from gainassay.forms.shortening import Deviation, at, pieces, shorten, without

GAIN = derive(library()["inverting"], {"r_source": "short", "r_load": "open"}).gain.whole


def test_pieces_are_addends_and_branches() -> None:
    found = {text(at(GAIN, path)) for path in pieces(GAIN)}
    assert {"r1", "r_id", "-r_o/(A r2)", "1"} <= found
    assert text(GAIN) not in found


def test_without_a_branch_the_other_is_left() -> None:
    path = next(p for p in pieces(GAIN) if text(at(GAIN, p)) == "r_id")
    assert "r_id" not in text(without(GAIN, frozenset({path})))


def test_nothing_to_drop_leaves_the_formula() -> None:
    assert without(GAIN, frozenset()) == GAIN


VALUES = {"r1": 1e3, "r2": 1e4, "A": 1e5, "r_id": 1e6, "r_o": 50.0}


def deviation(formula: Expression) -> Deviation:
    """Of one stage with one part, as a share of a required accuracy of 1 %."""
    exact = value(GAIN, VALUES)
    return Deviation(abs(value(formula, VALUES) / exact - 1.0) / 0.01, 0, 0)


@pytest.mark.parametrize(
    ("within", "formula"),
    [
        (1e-12, text(GAIN)),
        # -r_o/(A r2) alone is 5e-6 of the required accuracy, r_id beside r1 1e-5, r_o beside r2 5e-5, 1/A 1.1e-2.
        (1e-5, "-r2/(r1 (1 + (1/A)(1 + (r2 + r_o)/(r1 || r_id))))"),
        (1e-3, "-r2/(r1 (1 + (1/A)(1 + r2/r1)))"),
        (1e-1, "-r2/r1"),
    ],
)
def test_a_stage_whose_ratios_one_can_tell_by_hand(within: float, formula: str) -> None:
    found = shorten(GAIN, within, deviation)
    assert text(found.formula) == formula
    assert found.deviation == deviation(found.formula)
    assert found.deviation.share <= within


def test_what_has_no_value_is_never_dropped() -> None:
    def measure(formula: Expression) -> Deviation:
        return Deviation(0.0 if formula == GAIN else float("nan"), 0, 0)

    found = shorten(GAIN, 0.1, measure)
    assert found.formula == GAIN
    assert not found.dropped


def test_the_claim_is_the_measure_of_the_very_formula_shown() -> None:
    asked: dict[str, float] = {}

    def measure(formula: Expression) -> Deviation:
        share = 0.001 * (len(text(GAIN)) - len(text(formula)))
        asked[text(formula)] = share
        return Deviation(share, 0, 0)

    found = shorten(GAIN, 0.04, measure)
    assert asked[text(found.formula)] == found.deviation.share
