"""What the stage table says of tolerance, temperature, ageing and networks: taken as meant, or rejected."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING

import pytest

from gainassay import job as jobs
from gainassay.contracts.moves import DRIFT, MOVES, TEMPERATURE, TOLERANCE
from gainassay.errors import InputError
from gainassay.forms.topology import Topology
from gainassay.tables import stages
from gainassay.tables.stages import StageGroup, StageTable

if TYPE_CHECKING:
    from conftest import JobWriter

ROW = {"stage": "level", "topology": "inverting", "r1": "1k", "r2": "10k", "accuracy_pct": "1"}
HOT = {"t_min_c": "-40", "t_max_c": "85"}
GOOD = ROW | {"stage": "good"}

Load = Callable[..., StageTable]


@pytest.fixture
def load(write_job: JobWriter, built_in: Mapping[str, Topology]) -> Load:
    """Loads a stage table of some rows."""

    def loaded(*rows: Mapping[str, str]) -> StageTable:
        path: Path = write_job(stages=rows)
        return stages.load(jobs.read(path).stages, built_in)

    return loaded


def spread(group: StageGroup, move: int) -> dict[str, float]:
    """What is not zero, by element."""
    found = zip(group.form.elements, group.spreads.own[move, :, 0].tolist(), strict=True)
    return {name: value for name, value in found if value}


@pytest.mark.parametrize(
    ("cells", "move", "wanted"),
    [
        ({"tc_ppm_k": "25", **HOT}, TEMPERATURE, {"r1": 25e-6 * 65, "r2": 25e-6 * 65}),
        ({"tc_ppm_k": "25", "r1_tc_ppm_k": "5", **HOT}, TEMPERATURE, {"r1": 5e-6 * 65, "r2": 25e-6 * 65}),
        ({"tc_ppm_k": "25", "r1_tc_ppm_k": "0", **HOT}, TEMPERATURE, {"r2": 25e-6 * 65}),
        # A range that leaves out 25 degrees Celsius: values hold at 25, so the far end counts.
        ({"tc_ppm_k": "100", "t_min_c": "40", "t_max_c": "60"}, TEMPERATURE, {"r1": 35e-4, "r2": 35e-4}),
        ({"tc_ppm_k": "100", "t_min_c": "-20", "t_max_c": "0"}, TEMPERATURE, {"r1": 45e-4, "r2": 45e-4}),
        ({"tc_ppm_k": "100", "t_min_c": "25", "t_max_c": "25"}, TEMPERATURE, {}),
        ({"tc_ppm_k": "25", **HOT, "r_load": "2k"}, TEMPERATURE, dict.fromkeys(["r1", "r2", "r_load"], 25e-6 * 65)),
        ({"drift_pct": "0.5"}, DRIFT, {"r1": 0.005, "r2": 0.005}),
        ({"r2_drift_pct": "0.5"}, DRIFT, {"r2": 0.005}),
        # What is absent has neither tolerance nor drift.
        ({"r_load_tol_pct": "5"}, TOLERANCE, {}),
        ({"tol_pct": "0", "r1_tol_pct": ""}, TOLERANCE, {}),
    ],
)
def test_what_moves_an_element(load: Load, cells: dict[str, str], move: int, wanted: dict[str, float]) -> None:
    (group,) = load(ROW | cells).groups
    assert spread(group, move) == pytest.approx(wanted, rel=1e-12)


NETWORK = {"tol_pct": "1", "network": "na", "na_ratio_tol_pct": "0.05"}


@pytest.mark.parametrize(
    ("cells", "network", "ratio"),
    [
        (NETWORK, {"r1": 0, "r2": 0}, {TOLERANCE: 5e-4}),
        (NETWORK | {"r_load": "2k"}, {"r1": 0, "r2": 0, "r_load": 0}, {TOLERANCE: 5e-4}),
        (NETWORK | {"r_load": "2k", "r_load_network": "none"}, {"r1": 0, "r2": 0}, {TOLERANCE: 5e-4}),
        (
            NETWORK | {"tc_ppm_k": "25", "na_ratio_tc_ppm_k": "2", **HOT},
            {"r1": 0, "r2": 0},
            {TOLERANCE: 5e-4, TEMPERATURE: 2e-6 * 65},
        ),
        # One resistor alone in this stage, the other half of the network in another: no ratio counts here.
        ({"tol_pct": "1", "r1_network": "na", "na_ratio_tol_pct": "0.05"}, {"r1": 0}, {TOLERANCE: 5e-4}),
    ],
)
def test_networks(load: Load, cells: dict[str, str], network: dict[str, int], ratio: dict[int, float]) -> None:
    (group,) = load(ROW | cells).groups
    places = zip(group.form.elements, group.spreads.network[:, 0].tolist(), strict=True)
    assert {name: place for name, place in places if place >= 0} == network
    ratios = group.spreads.ratios[:, 0, 0]
    assert {move: float(ratios[move]) for move in range(len(MOVES)) if ratios[move] > 0} == pytest.approx(ratio)


@pytest.mark.parametrize(
    ("cells", "column", "reason"),
    [
        ({"t_min_c": "-40"}, "t_min_c, t_max_c", "one of the two is blank; a temperature range needs both"),
        ({"t_min_c": "85", "t_max_c": "-40"}, "t_min_c, t_max_c", "the lower end lies above the upper end"),
        ({"t_min_c": "-300", "t_max_c": "20"}, "t_min_c", "must be at least -273 degree Celsius"),
        ({"tc_ppm_k": "-5", **HOT}, "tc_ppm_k", "must be at least 0 ppm/K"),
        (
            {"r1_tc_ppm_k": "50000", **HOT},
            "r1_tc_ppm_k",
            "over this range of temperatures the value may change by 100 % and more",
        ),
        ({"drift_pct": "100"}, "drift_pct", "must be below 100 %"),
        ({"r3_tol_pct": "1"}, "r3_tol_pct", "topology 'inverting' has no element r3; empty the cell"),
        ({"r3_tc_ppm_k": "1"}, "r3_tc_ppm_k", "topology 'inverting' has no element r3; empty the cell"),
        ({"calibrated": "maybe"}, "calibrated", "is neither yes nor no; leave it blank for no"),
        (
            {"network": "na", "tol_pct": "1"},
            "network",
            "nothing says how well the resistors of network 'na' track; fill na_ratio_tol_pct or na_ratio_tc_ppm_k",
        ),
        (
            {"network": "na", "na_ratio_tol_pct": "0.1"},
            "na_ratio_tol_pct",
            "a ratio needs absolute values beside it; fill tol_pct",
        ),
        (
            NETWORK | {"r1_tol_pct": "2"},
            "na_ratio_tol_pct",
            "r1, r2 of network 'na' differ in tol_pct; those that track have one",
        ),
    ],
)
def test_doubt_is_rejected(load: Load, cells: dict[str, str], column: str, reason: str) -> None:
    found = load(GOOD, ROW | cells).rejects
    assert [(reject.row, reject.column, reject.reason) for reject in found] == [(3, column, reason)]


@pytest.mark.parametrize(
    ("cells", "hot", "calibrated"),
    [
        ({}, False, False),
        (HOT, True, False),
        ({"calibrated": "yes"}, False, True),
        ({"calibrated": " No "}, False, False),
        ({"calibrated": "YES", **HOT}, True, True),
    ],
)
def test_conditions(load: Load, cells: dict[str, str], hot: bool, calibrated: bool) -> None:
    (group,) = load(ROW | cells).groups
    assert (group.hot, group.calibrated) == (hot, calibrated)


def test_stages_of_one_topology_are_grouped_by_condition(load: Load) -> None:
    table = load(ROW | {"stage": "b"} | HOT, ROW | {"stage": "a"} | dict.fromkeys(HOT, ""))
    assert [group.names.tolist() for group in table.groups] == [["a"], ["b"]]


def test_a_coefficient_without_temperatures_is_said_to_move_nothing(load: Load) -> None:
    table = load(ROW | {"tc_ppm_k": "25"}, GOOD | {"tc_ppm_k": "0"})
    (warning,) = table.warnings
    assert "temperature coefficients without t_min_c and t_max_c, in 1 of its rows" in warning


def test_a_name_in_quotes_is_only_a_name(load: Load) -> None:
    with pytest.raises(InputError, match="nothing says how well the resistors of network"):
        load(ROW | {"tol_pct": "1", "network": "__import__('os').system('x')"})
