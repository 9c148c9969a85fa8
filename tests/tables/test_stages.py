"""The stage table: each bad cell is rejected with its place and a reason, and the good rows go on."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from gainassay import job as jobs
from gainassay.contracts.moves import TOLERANCE
from gainassay.errors import InputError
from gainassay.forms.topology import Topology
from gainassay.tables import stages
from gainassay.tables.stages import StageTable

if TYPE_CHECKING:
    from conftest import JobWriter

GOOD = {
    "stage": "good",
    "topology": "inverting",
    **dict.fromkeys(["r_source", "r_source_n", "r_shunt", "r3", "r4", "r_f", "r_load"], ""),
    "r1": "1k",
    "r2": "10k",
    "accuracy_pct": "1",
    "accuracy_ppm": "",
    "target_gain": "",
    "tol_pct": "",
    "r1_tol_pct": "",
}

Load = Callable[[Path], StageTable]


@pytest.fixture
def load(built_in: Mapping[str, Topology]) -> Load:
    """Loads the stage table of a job."""
    return lambda job: stages.load(jobs.read(job).stages, built_in)


NO_NUMBER = "is not a number; wanted is a plain number in ohm or a code such as 4k7 or 10M"


@pytest.mark.parametrize(
    ("cells", "column", "value", "reason"),
    [
        ({"r1": "12k3k"}, "r1", "12k3k", NO_NUMBER),
        ({"r1": "nan"}, "r1", "nan", "stands for nothing known; leave the cell empty"),
        ({"r1": "inf"}, "r1", "inf", NO_NUMBER),
        ({"r1": "1,5"}, "r1", "1,5", "has a comma; if ',' is the table's decimal sign"),
        ({"r1": "1e400"}, "r1", "1e400", "is infinite or too large"),
        ({"r1": "-1"}, "r1", "-1", "must be at least 0 ohm"),
        ({"r1": ""}, "r1", "", "is blank, but topology 'inverting' needs r1"),
        ({"r_f": "1k"}, "r_f", "1k", "topology 'inverting' has no element r_f; empty the cell"),
        ({"topology": "invertign"}, "topology", "invertign", "is no topology that is known; did you mean 'inverting'?"),
        ({"topology": "zzz"}, "topology", "zzz", "is no topology that is known; `gainassay topologies` lists"),
        ({"topology": " "}, "topology", " ", "is blank; name the stage's topology"),
        ({"stage": " "}, "stage", " ", "is blank; each row needs a name"),
        ({"stage": "b\x1bad"}, "stage", "b\x1bad", "holds a control character; use printable text"),
        ({"stage": "b\x9bad"}, "stage", "b\x9bad", "holds a control character; use printable text"),
        ({"stage": "b\nad"}, "stage", "b\nad", "holds a control character; use printable text"),
        ({"accuracy_pct": ""}, "accuracy_pct, accuracy_ppm", ", ", "both are blank"),
        ({"accuracy_ppm": "5"}, "accuracy_pct, accuracy_ppm", "1, 5", "both are given; give one of the two"),
        ({"accuracy_pct": "0"}, "accuracy_pct", "0", "must be above 0 %"),
        ({"accuracy_pct": "fine"}, "accuracy_pct", "fine", "is not a number; wanted is a plain number in %"),
        ({"tol_pct": "100"}, "tol_pct", "100", "must be below 100 %"),
        ({"tol_pct": "-1"}, "tol_pct", "-1", "must be at least 0 %"),
        ({"r1_tol_pct": "5 V"}, "r1_tol_pct", "5 V", "ends in a unit or word"),
        ({"target_gain": "0"}, "target_gain", "0", "must not be zero"),
        ({"target_gain": "4k7"}, "target_gain", "4k7", "is not a number; wanted is a plain number"),
        ({"r2": "0"}, "r_source, r1, r2, r_load", ", 1k, 0, ", "these values make the ideal gain"),
        ({"r1": "0"}, "r_source, r1, r2, r_load", ", 0, 10k, ", "these values make the ideal gain"),
        ({"r1": "0", "r2": "0"}, "r_source, r1, r2, r_load", ", 0, 0, ", "these values make the ideal gain"),
    ],
)
def test_a_bad_cell_is_rejected_and_the_good_row_goes_on(
    write_job: JobWriter, load: Load, cells: dict[str, str], column: str, value: str, reason: str
) -> None:
    job = write_job(stages=[GOOD | {"stage": "bad"} | cells, GOOD])
    found = load(job)
    (reject,) = found.rejects
    assert (reject.source, reject.row, reject.column) == (str(job.parent / "stages.csv"), 2, column)
    assert reject.value == value
    assert reject.reason.startswith(reason)
    assert [name for group in found.groups for name in group.names] == ["good"]
    assert (found.rows, found.used()) == (2, 1)


def test_every_bad_cell_of_a_row_is_told(write_job: JobWriter, load: Load) -> None:
    bad = GOOD | {"stage": "bad", "r1": "x", "r2": "y", "accuracy_pct": "", "tol_pct": "z"}
    found = load(write_job(stages=[GOOD, bad]))
    assert sorted(r.column for r in found.rejects) == ["accuracy_pct, accuracy_ppm", "r1", "r2", "tol_pct"]
    assert {r.row for r in found.rejects} == {3}


def test_both_rows_of_a_repeated_name_are_rejected(write_job: JobWriter, load: Load) -> None:
    twice = [GOOD | {"stage": name} for name in ("a", "b", " a ", "c")]
    found = load(write_job(stages=twice))
    assert [(r.row, r.value, r.reason) for r in found.rejects] == [
        (2, "a", "stands more than once: also in row 4; which is meant?"),
        (4, " a ", "stands more than once: also in row 2; which is meant?"),
    ]


def test_a_row_of_another_length_is_rejected(write_job: JobWriter, load: Load) -> None:
    text = "stage,topology,r1,r2,accuracy_pct\na,inverting,1k,10k\nb,inverting,1k,10k,1\n"
    found = load(write_job(stages=text))
    assert [(r.row, r.value) for r in found.rejects] == [(2, "a,inverting,1k,10k")]
    assert (found.rows, found.used()) == (2, 1)


def test_a_value_that_is_very_long_is_cut_in_the_reject(write_job: JobWriter, load: Load) -> None:
    (reject,) = load(write_job(stages=[GOOD, GOOD | {"stage": "bad", "r1": "x" * 5000}])).rejects
    assert reject.value.endswith("... (5000 characters)")
    assert len(reject.value) < 300


@pytest.mark.parametrize(
    ("header", "words"),
    [
        ("Stage,topology,r1,r2,accuracy_pct", "the column 'stage' is missing; did you mean 'Stage'?"),
        ("stage,toplogy,r1,r2,accuracy_pct", "the column 'topology' is missing; did you mean 'toplogy'?"),
        ("stage,topology,r1,r2,accuracy", "a column 'accuracy_pct' or 'accuracy_ppm' is missing"),
    ],
)
def test_a_missing_column_ends_the_job(write_job: JobWriter, load: Load, header: str, words: str) -> None:
    with pytest.raises(InputError, match=re.escape(words)):
        load(write_job(stages=f"{header}\na,inverting,1k,10k,1\n"))


@pytest.mark.parametrize(
    ("rows", "words"), [("", "has no rows"), ("\n\n", "has no rows"), ("a,inverting,x,10k,1\n", "none of its 1 rows")]
)
def test_a_table_without_a_usable_row_ends_the_job(write_job: JobWriter, load: Load, rows: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        load(write_job(stages=f"stage,topology,r1,r2,accuracy_pct\n{rows}"))


def test_an_unknown_column_is_named_with_the_nearest(write_job: JobWriter, load: Load) -> None:
    job = write_job(stages=[GOOD | {"r1_tol": "1", "remarks": "x"}])
    source = job.parent / "stages.csv"
    assert load(job).warnings == (
        f"{source}: column 'r1_tol' is not known and not read; did you mean 'r1_tol_pct'?",
        f"{source}: column 'remarks' is not known and not read",
    )


def test_blank_elements_mean_what_the_topology_says(write_job: JobWriter, load: Load) -> None:
    (group,) = load(write_job(stages=[GOOD])).groups
    values = dict(zip(group.form.elements, group.values[:, 0].tolist(), strict=True))
    assert values == {"r_source": 0.0, "r1": 1e3, "r2": 1e4, "r_load": math.inf}


def test_columns_of_optional_elements_may_be_left_out(write_job: JobWriter, load: Load) -> None:
    (group,) = load(write_job()).groups
    assert group.values[:, 0].tolist() == [0.0, 1e3, 1e4, math.inf]


@pytest.mark.parametrize(
    ("cells", "wanted"),
    [
        ({}, [0.0, 0.0, 0.0, 0.0]),
        ({"tol_pct": "0.1"}, [0.0, 0.001, 0.001, 0.0]),
        ({"tol_pct": "0.1", "r1_tol_pct": "5"}, [0.0, 0.05, 0.001, 0.0]),
        ({"tol_pct": "0.1", "r1_tol_pct": "0"}, [0.0, 0.0, 0.001, 0.0]),
        ({"tol_pct": "0.1", "r_load": "2k"}, [0.0, 0.001, 0.001, 0.001]),
        ({"r1_tol_pct": "1"}, [0.0, 0.01, 0.0, 0.0]),
    ],
)
def test_an_elements_own_tolerance_comes_first(
    write_job: JobWriter, load: Load, cells: dict[str, str], wanted: Sequence[float]
) -> None:
    (group,) = load(write_job(stages=[GOOD | cells])).groups
    assert group.spreads.own[TOLERANCE, :, 0].tolist() == pytest.approx(wanted, rel=1e-15)


@pytest.mark.parametrize(
    ("cells", "limit"), [({"accuracy_pct": "0.5"}, 0.005), ({"accuracy_pct": "", "accuracy_ppm": "50"}, 50e-6)]
)
def test_the_limit_is_a_fraction(write_job: JobWriter, load: Load, cells: dict[str, str], limit: float) -> None:
    (group,) = load(write_job(stages=[GOOD | cells])).groups
    assert group.limits.tolist() == pytest.approx([limit], rel=1e-15)


def test_a_target_gain_may_be_left_out(write_job: JobWriter, load: Load) -> None:
    rows = [GOOD | {"stage": "a", "target_gain": "-10.5"}, GOOD | {"stage": "b"}]
    (group,) = load(write_job(stages=rows)).groups
    assert group.targets[0] == -10.5
    assert math.isnan(group.targets[1])


def test_groups_and_stages_are_ordered_by_name(write_job: JobWriter, load: Load) -> None:
    rows = [GOOD | {"stage": name} for name in ("b", "a10", "a2", "B", "é")]
    rows += [GOOD | {"stage": "a", "topology": "follower", "r1": "", "r2": ""}]
    groups = load(write_job(stages=rows)).groups
    assert [group.topology.name for group in groups] == ["follower", "inverting"]
    assert groups[1].names.tolist() == ["B", "a10", "a2", "b", "é"]


def test_a_column_of_another_topology_needs_no_value_here(write_job: JobWriter, load: Load) -> None:
    summer = GOOD | {"stage": "sum", "topology": "summing_2_in1", "r_f": "10k", "r_source": ""}
    found = load(write_job(stages=[GOOD, summer]))
    assert not found.rejects
    assert found.used() == 2


def test_a_parquet_table_reads_like_its_csv(write_job: JobWriter, load: Load) -> None:
    job = write_job(tables='[stages]\nfrom = "stages.parquet"\n[parts]\nfrom = "parts.csv"\n')
    columns = {
        "stage": pa.array(["b", "a", "c"]).dictionary_encode(),
        "topology": pa.array(["inverting"] * 3),
        "r1": pa.array([1000, 2000, 3000]),
        "r2": pa.array([1e4, math.nan, math.inf]),
        "accuracy_pct": pa.array([1.0, 1.0, 1.0], pa.float32()),
    }
    pq.write_table(pa.table(columns), job.parent / "stages.parquet")
    found = load(job)
    assert found.groups[0].names.tolist() == ["b"]
    assert found.groups[0].values[:, 0].tolist() == [0.0, 1e3, 1e4, math.inf]
    assert [(r.row, r.column, r.value, r.reason) for r in found.rejects] == [
        (2, "r2", "nan", "is nan, which is no number; leave the cell empty where nothing is known"),
        (3, "r2", "inf", "is infinite or too large"),
    ]


def test_a_parquet_column_that_nothing_reads_may_hold_anything(write_job: JobWriter, load: Load) -> None:
    job = write_job(tables='[stages]\nfrom = "stages.parquet"\n[parts]\nfrom = "parts.csv"\n')
    row = {"stage": ["a"], "topology": ["inverting"], "r1": [1e3], "r2": [1e4], "accuracy_pct": [1.0], "tags": [["x"]]}
    pq.write_table(pa.table(row), job.parent / "stages.parquet")
    found = load(job)
    assert found.used() == 1
    assert ["'tags'" in warning for warning in found.warnings] == [True]
