"""A form shortened for a job: its claim, checked pair by pair against the independent solver."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest

import oracle
from gainassay import service, shortened
from gainassay.errors import InputError
from gainassay.forms.evaluation import value
from gainassay.forms.expression import length
from gainassay.forms.library import library

if TYPE_CHECKING:
    from conftest import JobWriter

INVERTING = library()["inverting"]
STAGES = [
    {"stage": "a", "topology": "inverting", "r1": "1000", "r2": "100000", "r_load": "2000", "accuracy_ppm": "10000"},
    {"stage": "b", "topology": "inverting", "r1": "10000", "r2": "22000", "r_load": "", "accuracy_ppm": "500"},
    {"stage": "c", "topology": "inverting", "r1": "4700", "r2": "4700", "r_load": "10000", "accuracy_ppm": "1000"},
]
PARTS = [
    {"part": "p", "a_ol_typ": "1e5", "r_id_typ": "1e6", "r_o_typ": "75"},
    {"part": "q", "a_ol_typ": "3e6", "r_id_typ": "1e11", "r_o_typ": "300"},
    {"part": "r", "a_ol_typ": "2e4", "r_id_typ": "3e5", "r_o_typ": "40"},
]


def elements(stage: dict[str, str]) -> dict[str, float]:
    return {"r_source": 0.0, **{name: float(stage[name] or "inf") for name in ("r1", "r2", "r_load")}}


def part_of(part: dict[str, str]) -> oracle.Part:
    return oracle.Part(float(part["a_ol_typ"]), float(part["r_id_typ"]), float(part["r_o_typ"]))


@pytest.mark.oracle
@pytest.mark.parametrize("within", [0.3, 0.1, 0.01, 1e-4])
def test_verified_deviation_is_the_largest_over_all_pairs(write_job: JobWriter, within: float) -> None:
    prepared = service.prepare(write_job(stages=STAGES, parts=PARTS))
    found = shortened.shorten(prepared, INVERTING, within)
    shares = {}
    for stage in STAGES:
        for part in PARTS:
            figures = part_of(part)
            known = {**elements(stage), "A": figures.a_ol, "r_id": figures.r_id, "r_o": figures.r_o}
            short = float(value(found.found.formula, {name: np.float64(number) for name, number in known.items()}))
            exact = float(oracle.gain(INVERTING, elements(stage), figures))
            shares[stage["stage"], part["part"]] = abs(short / exact - 1) / (float(stage["accuracy_ppm"]) * 1e-6)
    assert found.absent == {"r_source": "short"}
    assert found.found.deviation.share == pytest.approx(max(shares.values()), rel=1e-6, abs=1e-9)
    assert found.found.deviation.share <= within
    if max(shares.values()) > 1e-9:
        assert (found.stage, found.part) == max(shares, key=lambda pair: shares[pair])


def test_a_wide_allowance_gives_a_shorter_formula(write_job: JobWriter) -> None:
    prepared = service.prepare(write_job(stages=STAGES, parts=PARTS))
    exact, short = (shortened.shorten(prepared, INVERTING, within).found for within in (1e-9, 0.5))
    assert not exact.dropped
    assert length(short.formula) < length(exact.formula)


def test_a_job_without_such_stages_is_told_so(write_job: JobWriter) -> None:
    prepared = service.prepare(write_job(stages=STAGES, parts=PARTS))
    with pytest.raises(InputError, match="no usable stage has the topology 'follower'"):
        shortened.shorten(prepared, prepared.topologies["follower"], 0.1)
