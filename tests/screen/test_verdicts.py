"""The written rule of verdicts, row by row."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from gainassay.contracts.evidence import ASSUMED, EVIDENCE, GUARANTEED, MISSING, TYPICAL
from gainassay.forms.form import derive
from gainassay.forms.library import library
from gainassay.screen.boxes import with_tolerances
from gainassay.screen.corners import active_sets, part_side, stage_side
from gainassay.screen.kernel import screen
from gainassay.screen.verdicts import BITS, VERDICTS, Rules, judge, leaning, reason

PLAIN = Rules()
FORM = derive(library()["inverting"])


def judged(evidence: tuple[int, int, int], limit: float, rules: Rules = PLAIN) -> tuple[str, str, str, float, str]:
    values = np.array([[0.0], [1e4], [1e5], [np.inf]])
    stages = stage_side(FORM, with_tolerances(values, np.zeros_like(values), np.array([limit]), np.array([np.nan])))
    limits = np.array([[1e-5], [1e-7], [50.0], [0.0], [0.0]])
    of_part = (*evidence, GUARANTEED, GUARANTEED)
    parts = part_side(FORM, limits, limits, np.array(of_part, np.uint8)[:, None])
    outcome = screen(stages, parts, active_sets(FORM))
    judgement = judge(stages, parts, outcome, rules)
    leans = leaning(int(judgement.leaning[0, 0]))
    used = float(judgement.limit_used[0, 0])
    why = reason(int(judgement.reason[0, 0]))
    return VERDICTS[int(judgement.verdict[0, 0])], leans.evidence, leans.leans_on, used, why


@pytest.mark.parametrize(
    ("evidence", "limit", "verdict", "weakest", "leans_on"),
    [
        ((GUARANTEED, GUARANTEED, GUARANTEED), 1e-3, "pass", "guaranteed", ""),
        ((GUARANTEED, TYPICAL, GUARANTEED), 1e-3, "unproven", "typical", "r_id typical"),
        ((TYPICAL, GUARANTEED, ASSUMED), 1e-3, "unproven", "assumed", "a_ol typical, r_o assumed"),
        ((GUARANTEED, MISSING, ASSUMED), 1e-3, "unproven", "missing", "r_id missing, r_o assumed"),
        ((GUARANTEED, GUARANTEED, GUARANTEED), 1e-6, "fail", "guaranteed", ""),
        ((TYPICAL, TYPICAL, TYPICAL), 1e-6, "fail", "typical", "a_ol typical, r_id typical, r_o typical"),
        ((GUARANTEED, MISSING, GUARANTEED), 1e-6, "fail", "missing", "r_id missing"),
    ],
)
def test_rule(evidence: tuple[int, int, int], limit: float, verdict: str, weakest: str, leans_on: str) -> None:
    assert judged(evidence, limit)[:3] == (verdict, weakest, leans_on)


def test_an_error_equal_to_the_limit_is_inside() -> None:
    used = judged((0, 0, 0), 1.0)[3]
    assert judged((0, 0, 0), used)[0] == "pass"
    assert judged((0, 0, 0), np.nextafter(used, 0.0))[0] == "fail"


USED = judged((0, 0, 0), 1.0)[3]
"""Worst error of the stage under test, as a fraction."""


@pytest.mark.parametrize(
    ("evidence", "limit", "rules", "verdict", "reason"),
    [
        (GUARANTEED, USED / 0.79, Rules(guard_band=0.2), "pass", "inside the limit"),
        (GUARANTEED, USED / 0.81, Rules(guard_band=0.2), "fail", "inside the limit, but in its guard band"),
        (GUARANTEED, USED / 1.01, Rules(guard_band=0.2), "fail", "outside the limit"),
        (TYPICAL, USED / 0.79, Rules(guard_band=0.2), "unproven", "inside the limit, but leans on a_ol typical"),
        (TYPICAL, USED / 0.79, Rules(0.2, TYPICAL), "pass", "inside the limit"),
        (TYPICAL, USED / 0.81, Rules(0.2, TYPICAL), "fail", "inside the limit, but in its guard band"),
        (ASSUMED, USED / 0.79, Rules(0.2, TYPICAL), "unproven", "inside the limit, but leans on a_ol assumed"),
        (MISSING, USED / 0.79, Rules(0.2, TYPICAL), "unproven", "inside the limit, but leans on a_ol missing"),
        (MISSING, USED / 1.01, Rules(0.2, TYPICAL), "fail", "outside the limit"),
    ],
)
def test_guard_band_and_basis(evidence: int, limit: float, rules: Rules, verdict: str, reason: str) -> None:
    found = judged((evidence, GUARANTEED, GUARANTEED), limit, rules)
    assert (found[0], found[4]) == (verdict, reason)


def test_what_does_not_matter_to_a_stage_is_not_leaned_on() -> None:
    values = np.array([[0.0], [1e4], [1e5], [np.inf]])
    stages = stage_side(FORM, with_tolerances(values, np.zeros_like(values), np.array([1e-2]), np.array([np.nan])))
    limits = np.array([[1e-5], [0.0], [50.0], [0.0], [0.0]])
    evidence = np.array([[GUARANTEED], [MISSING], [GUARANTEED], [GUARANTEED], [MISSING]], np.uint8)
    parts = part_side(FORM, limits, limits, evidence)
    outcome = screen(stages, parts, active_sets(FORM))
    without = replace(stages, matters=np.array([[True], [False], [True], [False], [False]]))
    assert stages.matters[:, 0].tolist() == [True, True, True, False, False]
    assert VERDICTS[int(judge(stages, parts, outcome, Rules()).verdict[0, 0])] == "unproven"
    assert VERDICTS[int(judge(without, parts, outcome, Rules()).verdict[0, 0])] == "pass"


def test_every_leaning_has_its_weakest_evidence() -> None:
    found = [leaning(code) for code in range(1 << BITS * 4)]
    assert {one.evidence for one in found} == set(EVIDENCE)
    for one in found:
        words = one.leans_on.replace(",", "").split()[1::2]
        weakest = max((EVIDENCE.index(word) for word in words), default=0)
        assert one.evidence == EVIDENCE[weakest]
