"""Operating limits at their edges, one by one, and what is not known of them."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import pytest

from gainassay import service
from gainassay.contracts.limits import LIMITS
from gainassay.errors import InputError
from gainassay.screen import blocks, limits
from gainassay.screen.blocks import Screened
from gainassay.screen.verdicts import VERDICTS, Rules, reason

if TYPE_CHECKING:
    from conftest import JobWriter

Cells = Mapping[str, str]

STAGE = {
    **{"stage": "level", "topology": "non_inverting", "r1": "1k", "r2": "9k", "r_load": "2k", "accuracy_pct": "5"},
    **{"v_out_peak": "10", "v_supply": "30", "frequency_hz": "10k"},
}
"""Its amplifier puts out 10 V and 6 mA, slopes 0.6283 V/us, and has 1 V at its inputs and a noise gain of 10."""

PART = {
    **{"part": "amp", "a_ol_min": "1e6", "gbw_min": "1G", "v_swing_headroom_max": "2", "i_out_max": "20m"},
    **{"v_cm_headroom_low_max": "1", "v_cm_headroom_high_max": "1", "slew_rate_v_us_min": "2", "gain_stable_min": "1"},
    **{"full_power_hz_min": "20k", "v_full_power_peak": "10", "v_supply_min": "5", "v_supply_max": "36"},
    **{"t_part_min_c": "-40", "t_part_max_c": "125"},
}
"""It bears all that."""

SLOPE = 2.0 * math.pi * 10e3 * 10.0 / 1e6


def screened(write_job: JobWriter, stages: Sequence[Cells], parts: Sequence[Cells]) -> Screened:
    job = write_job(stages=[{**STAGE, **cells} for cells in stages], parts=[{**PART, **cells} for cells in parts])
    groups = service.groups_of(service.prepare(job))
    return blocks.screen_chunk(groups, blocks.chunks(groups)[0], Rules())


def outcome(found: Screened, place: int = 0) -> tuple[str, str]:
    """Verdict and reason of one stage with a part."""
    verdict, code = (values[0, place] for values in (found.judgement.verdict, found.judgement.reason))
    return VERDICTS[verdict], reason(int(code))


def unchecked(found: Screened) -> str:
    return limits.named(int(found.kept.unchecked[0, 0]))


def margin(found: Screened, name: str) -> float:
    return float(dict(limits.margins(found.group.bounds))[name][0, 0])


INTEGRATOR = {"topology": "integrator", "r1": "1k", "c1": "1n", "r2": "1e12", "r_load": ""}
"""Its output current flows into c1: 10 V times 2 pi 10 kHz 1 nF."""

BAND = {"frequency_hz": "", "f_min_hz": "100", "f_max_hz": "10k"}

EDGES = [
    # limit, cells of the stage, column of the part, its edge, and whether more of it is worse
    ("output_swing", {}, "v_swing_headroom_max", 5.0, True),
    ("output_swing", {"v_ground": "12"}, "v_swing_headroom_max", 2.0, True),
    ("output_swing", {"v_ground": "18"}, "v_swing_headroom_max", 2.0, True),
    ("output_swing", {"v_in_dc": "0.2"}, "v_swing_headroom_max", 3.0, True),
    ("output_swing", {"v_in_dc": "-0.2"}, "v_swing_headroom_max", 3.0, True),
    ("output_swing", {"v_supply": "3.3", "v_out_peak": "1.6"}, "v_swing_headroom_max", 0.05, True),
    ("output_current", {}, "i_out_max", 6e-3, False),
    ("output_current", {"v_in_dc": "-0.2"}, "i_out_max", 7.2e-3, False),
    ("output_current", {"r_load": ""}, "i_out_max", 1e-3, False),
    ("output_current", INTEGRATOR, "i_out_max", 2.0 * math.pi * 1e4 * 1e-9 * 10.0, False),
    ("output_current", {**INTEGRATOR, **BAND}, "i_out_max", 2.0 * math.pi * 1e4 * 1e-9 * 10.0, False),
    ("input_range", {}, "v_cm_headroom_low_max", 14.0, True),
    ("input_range", {}, "v_cm_headroom_high_max", 14.0, True),
    ("input_range", {"v_ground": "13"}, "v_cm_headroom_low_max", 12.0, True),
    ("input_range", {"v_ground": "13"}, "v_cm_headroom_high_max", 16.0, True),
    ("input_range", {"v_in_dc": "0.2"}, "v_cm_headroom_high_max", 13.8, True),
    ("input_range", {"v_out_peak": "2", "v_supply": "20", "v_ground": "0.1"}, "v_cm_headroom_low_max", -0.1, True),
    ("slew_rate", {}, "slew_rate_v_us_min", SLOPE, False),
    ("slew_rate", BAND, "slew_rate_v_us_min", SLOPE, False),
    ("full_power", {}, "full_power_hz_min", 10e3, False),
    ("full_power", {}, "v_full_power_peak", 5.0, False),
    ("stable_gain", {}, "gain_stable_min", 10.0, True),
    ("supply_range", {}, "v_supply_min", 30.0, True),
    ("supply_range", {}, "v_supply_max", 30.0, False),
    ("temperature_range", {}, "t_part_min_c", 25.0, True),
    ("temperature_range", {}, "t_part_max_c", 25.0, False),
    ("temperature_range", {"t_min_c": "-10", "t_max_c": "60"}, "t_part_min_c", -10.0, True),
    ("temperature_range", {"t_min_c": "-10", "t_max_c": "60"}, "t_part_max_c", 60.0, False),
]


@pytest.mark.parametrize(("name", "cells", "column", "edge", "more_is_worse"), EDGES)
def test_an_edge(write_job: JobWriter, name: str, cells: Cells, column: str, edge: float, more_is_worse: bool) -> None:
    # With ground near an end of the supply the output needs all the room there is.
    wide = {"v_swing_headroom_max": "0"} if column != "v_swing_headroom_max" and "v_ground" in cells else {}
    step = 1e-6 * abs(edge)
    worse, better = (edge + step, edge - step) if more_is_worse else (edge - step, edge + step)
    parts = [{**wide, "part": f"amp-{place}", column: repr(value)} for place, value in enumerate((better, edge, worse))]
    found = screened(write_job, [cells], parts)
    at = dict(limits.margins(found.group.bounds))[name][0]
    assert at[0] > 0.0 > at[2]
    assert at[1] == 0.0
    bit = 1 << [limit.name for limit in LIMITS].index(name)
    assert [bool(code & bit) for code in found.kept.outside[0]] == [False, False, True]
    assert outcome(found, 2)[0] == "fail"


def test_the_first_limit_is_the_reason(write_job: JobWriter) -> None:
    found = screened(write_job, [{}], [{"v_swing_headroom_max": "6", "i_out_max": "1m", "a_ol_min": "2"}])
    assert outcome(found) == ("fail", "outside limit.output_swing")
    assert limits.named(int(found.kept.outside[0, 0])) == "output_swing, output_current"
    assert found.group.dominant_names()[found.outcome.dominant[0, 0]] == "limit.output_swing"
    assert math.isnan(found.outcome.dominant_value[0, 0])


def test_all_is_checked_and_kept(write_job: JobWriter) -> None:
    found = screened(write_job, [{}], [{}])
    assert outcome(found) == ("pass", "inside the limit")
    assert unchecked(found) == ""


@pytest.mark.parametrize(
    ("stage", "part", "names"),
    [
        ({"v_supply": ""}, {}, "output_swing, input_range, supply_range"),
        ({"v_out_peak": ""}, {}, "output_swing, output_current, input_range, slew_rate, full_power"),
        ({"frequency_hz": ""}, {}, "slew_rate, full_power"),
        ({}, {"v_swing_headroom_max": ""}, "output_swing"),
        ({}, {"i_out_max": ""}, "output_current"),
        ({}, {"v_cm_headroom_low_max": ""}, "input_range"),
        ({}, {"v_cm_headroom_high_max": ""}, "input_range"),
        ({}, {"slew_rate_v_us_min": ""}, "slew_rate"),
        ({}, {"full_power_hz_min": ""}, "full_power"),
        ({}, {"v_full_power_peak": ""}, "full_power"),
        ({}, {"gain_stable_min": ""}, "stable_gain"),
        ({}, {"v_supply_min": ""}, "supply_range"),
        ({}, {"t_part_max_c": ""}, "temperature_range"),
    ],
)
def test_what_is_missing_is_not_checked(write_job: JobWriter, stage: Cells, part: Cells, names: str) -> None:
    found = screened(write_job, [stage], [part])
    assert unchecked(found) == names
    assert outcome(found)[0] == "pass"
    assert all(math.isnan(margin(found, name)) for name in names.split(", "))


@pytest.mark.parametrize(
    ("name", "part"),
    [
        ("input_range", {"v_cm_headroom_low_max": "", "v_cm_headroom_high_max": "15"}),
        ("supply_range", {"v_supply_min": "", "v_supply_max": "24"}),
        ("temperature_range", {"t_part_min_c": "30", "t_part_max_c": ""}),
    ],
)
def test_one_end_of_a_range_is_enough_to_be_outside(write_job: JobWriter, name: str, part: Cells) -> None:
    found = screened(write_job, [{}], [part])
    assert outcome(found) == ("fail", f"outside limit.{name}")
    assert unchecked(found) == ""
    assert margin(found, name) < 0.0


@pytest.mark.parametrize(
    ("column", "text", "name", "expected"),
    [
        ("i_out_max", "16 mA", "output_current", 10e-3),
        ("slew_rate_v_us_min", "1000 V/ms", "slew_rate", 1.0 - SLOPE),
        ("slew_rate_v_us_min", "2e6 V/s", "slew_rate", 2.0 - SLOPE),
        ("slew_rate_v_us_min", "0.001 V/ns", "slew_rate", 1.0 - SLOPE),
        ("full_power_hz_min", "20 kHz", "full_power", SLOPE),
        ("v_swing_headroom_max", "500 mV", "output_swing", 4.5),
    ],
)
def test_units(write_job: JobWriter, column: str, text: str, name: str, expected: float) -> None:
    assert margin(screened(write_job, [{}], [{column: text}]), name) == pytest.approx(expected, rel=1e-12)


NETWORKS: list[tuple[dict[str, str], float]] = [
    ({"topology": "follower", "r1": "", "r2": ""}, 1.0),
    ({"topology": "inverting"}, 10.0),
    # Far above its corner frequency the capacitor takes the whole output back; 0 F is no capacitor.
    ({"topology": "integrator", "c1": "1n"}, 1.0),
    ({"topology": "integrator", "c1": "0"}, 10.0),
    ({"topology": "cascade_inverting", "r3": "1k", "r4": "9k"}, 10.0),
    ({"topology": "cascade_inverting", "r3": "1k", "r4": "3k"}, 4.0),
    # What both inputs have in common is not amplified, so that the loop of the front is that of followers.
    ({"topology": "instrumentation_3", "r_gain": "1k", **dict.fromkeys(["r3", "r4", "r5", "r6"], "10k")}, 1.0),
    # Its loops are one of second order: no noise gain is stated.
    ({"topology": "composite", "r3": "1k", "r4": "3k"}, math.nan),
]  # fmt: skip


@pytest.mark.parametrize(("cells", "noise_gain"), NETWORKS)
def test_noise_gain(write_job: JobWriter, cells: Cells, noise_gain: float) -> None:
    found = screened(write_job, [cells], [{}])
    place = [side.limit for side in limits.SIDES].index("stable_gain")
    assert found.group.bounds.asked[place, 0] == pytest.approx(noise_gain, rel=1e-12, nan_ok=True)
    assert ("stable_gain" in unchecked(found)) == math.isnan(noise_gain)


@pytest.mark.parametrize(
    ("stage", "part", "message"),
    [
        ({"v_ground": "31"}, {}, "the stage's ground lies above its positive supply"),
        ({"topology": "transimpedance", "r1": "", "v_in_dc": "1"}, {}, "is a current; empty the cell"),
        ({"v_out_peak": "-1"}, {}, "must be at least 0 V"),
        ({"v_supply": "0"}, {}, "must be above 0 V"),
        ({}, {"v_supply_min": "40"}, "the least supply lies above the largest"),
        ({}, {"t_part_min_c": "130"}, "the lowest temperature lies above the highest"),
        ({}, {"gain_stable_min": "0.5"}, "must be at least 1 V/V"),
    ],
)
def test_what_cannot_be(write_job: JobWriter, stage: Cells, part: Cells, message: str) -> None:
    with pytest.raises(InputError, match=message):
        screened(write_job, [stage], [part])


def test_a_current_source_is_judged_by_the_voltage_across_its_load(write_job: JobWriter) -> None:
    cells = {"topology": "voltage_to_current", "r1": "500", "r2": "", "r_load": "1k"}
    found = screened(write_job, [cells], [{}])
    asked = dict(zip([side.limit for side in limits.SIDES], found.group.bounds.asked[:, 0].tolist(), strict=True))
    assert asked["output_swing"] == pytest.approx(15.0, rel=1e-12)
    assert asked["output_current"] == pytest.approx(10e-3, rel=1e-12)
    assert asked["input_range"] == pytest.approx(5.0, rel=1e-12)
