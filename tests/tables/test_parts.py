"""The parts table: data-sheet figures as departures, and the evidence that each of them rests on."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import pytest

from gainassay import job as jobs
from gainassay import service
from gainassay.contracts.evidence import EVIDENCE
from gainassay.errors import InputError
from gainassay.forms.departures import DEPARTURES
from gainassay.tables import parts as parts_table
from gainassay.tables.parts import PartTable

if TYPE_CHECKING:
    from conftest import JobWriter

COLUMNS = ("a_ol_min", "a_ol_typ", "a_ol_db_min", "a_ol_db_typ", "r_id_min", "r_id_typ", "r_o_typ", "r_o_max")
BLANK = {"part": "good", **dict.fromkeys(COLUMNS, "")}
GOOD = BLANK | {"a_ol_min": "100000", "r_id_min": "1M", "r_o_max": "100"}


def load(job: Path) -> PartTable:
    """The parts table of a job."""
    read = jobs.read(job)
    return parts_table.load(read.parts, read.assume)


def departure(parts: PartTable, quantity: str) -> tuple[float, float, str]:
    """Nominal and worst value of a departure of the first part, and its evidence."""
    place = [d.quantity for d in DEPARTURES].index(quantity)
    return (
        float(parts.nominal[place, 0]),
        float(parts.worst[place, 0]),
        EVIDENCE[int(parts.evidence[place, 0])],
    )


@pytest.mark.parametrize(
    ("cells", "column", "value", "reason"),
    [
        ({"a_ol_min": "2500O0"}, "a_ol_min", "2500O0", "is not a number; wanted is a plain number in V/V"),
        (
            {"a_ol_min": "100 dB"},
            "a_ol_min",
            "100 dB",
            "has 'dB' after the number: such figures belong into a column",
        ),
        ({"a_ol_min": "0"}, "a_ol_min", "0", "must be above 0 V/V"),
        ({"a_ol_min": "-50000"}, "a_ol_min", "-50000", "must be above 0 V/V"),
        ({"a_ol_min": "inf"}, "a_ol_min", "inf", "is not a number"),
        ({"a_ol_min": "", "a_ol_db_min": "100000"}, "a_ol_db_min", "100000", "must be at most 400 dB"),
        ({"r_id_min": "n/a"}, "r_id_min", "n/a", "stands for nothing known; leave the cell empty"),
        ({"r_id_min": "0"}, "r_id_min", "0", "must be above 0 ohm"),
        ({"r_o_max": "nan"}, "r_o_max", "nan", "stands for nothing known"),
        ({"r_o_max": "-1"}, "r_o_max", "-1", "must be at least 0 ohm"),
        ({"part": " "}, "part", " ", "is blank; each row needs a name"),
        ({"part": "amp\x07"}, "part", "amp\x07", "holds a control character"),
        ({"a_ol_typ": "90000"}, "a_ol_min, a_ol_typ", "100000, 90000", "the minimum lies above the typical figure"),
        ({"a_ol_db_typ": "99"}, "a_ol_min, a_ol_db_typ", "100000, 99", "the minimum lies above the typical figure"),
        ({"r_id_typ": "999k"}, "r_id_min, r_id_typ", "1M, 999k", "the minimum lies above the typical figure"),
        ({"r_o_typ": "101"}, "r_o_max, r_o_typ", "100, 101", "the maximum lies below the typical figure"),
        ({"a_ol_db_min": "100"}, "a_ol_min, a_ol_db_min", "100000, 100", "both are given; give one of the two"),
    ],
)
def test_a_bad_cell_is_rejected_and_the_good_row_goes_on(
    write_job: JobWriter, cells: dict[str, str], column: str, value: str, reason: str
) -> None:
    job = write_job(parts=[GOOD, GOOD | {"part": "bad"} | cells])
    found = load(job)
    (reject,) = found.rejects
    assert (reject.source, reject.row, reject.column) == (str(job.parent / "parts.csv"), 3, column)
    assert reject.value == value
    assert reject.reason.startswith(reason)
    assert found.names.tolist() == ["good"]
    assert found.rows == 2


def test_a_limit_may_equal_the_typical_figure(write_job: JobWriter) -> None:
    equal = GOOD | {"a_ol_db_typ": "100", "r_id_typ": "1000k", "r_o_typ": "100"}
    assert not load(write_job(parts=[equal])).rejects


@pytest.mark.parametrize(
    ("cells", "assume", "wanted"),
    [
        # Open-loop gain: the departure is 1/A, so its worst case is the smallest A.
        ({"a_ol_min": "1000"}, "", ("a_ol", 1e-3, 1e-3, "guaranteed")),
        ({"a_ol_min": "1000", "a_ol_typ": "4000"}, "", ("a_ol", 2.5e-4, 1e-3, "guaranteed")),
        ({"a_ol_typ": "4000"}, "", ("a_ol", 2.5e-4, 2.5e-4, "typical")),
        ({"a_ol_typ": "4000"}, "a_ol = { typical_times = 0.5 }", ("a_ol", 2.5e-4, 5e-4, "typical")),
        ({"a_ol_typ": "4000"}, "a_ol = { value = 10 }", ("a_ol", 2.5e-4, 2.5e-4, "typical")),
        ({}, "a_ol = { value = 10 }", ("a_ol", 0.1, 0.1, "assumed")),
        ({}, "a_ol = { value = 10, typical_times = 0.5 }", ("a_ol", 0.1, 0.1, "assumed")),
        ({}, "", ("a_ol", 0.0, 0.0, "missing")),
        ({}, "a_ol = { typical_times = 0.5 }", ("a_ol", 0.0, 0.0, "missing")),
        ({"a_ol_db_min": "60"}, "", ("a_ol", 1e-3, 1e-3, "guaranteed")),
        ({"a_ol_db_min": "60", "a_ol_typ": "2000"}, "", ("a_ol", 5e-4, 1e-3, "guaranteed")),
        ({"a_ol_db_typ": "80"}, "a_ol = { typical_times = 0.5 }", ("a_ol", 1e-4, 2e-4, "typical")),
        # Input resistance: 1/r_id.
        ({"r_id_min": "1M", "r_id_typ": "4M"}, "", ("r_id", 2.5e-7, 1e-6, "guaranteed")),
        ({"r_id_typ": "4M"}, "r_id = { typical_times = 0.25 }", ("r_id", 2.5e-7, 1e-6, "typical")),
        ({}, "r_id = { value = 1e6 }", ("r_id", 1e-6, 1e-6, "assumed")),
        # Output resistance: r_o itself, so its worst case is the largest.
        ({"r_o_typ": "40", "r_o_max": "100"}, "", ("r_o", 40.0, 100.0, "guaranteed")),
        ({"r_o_max": "100"}, "r_o = { typical_times = 2, value = 300 }", ("r_o", 100.0, 100.0, "guaranteed")),
        ({"r_o_typ": "40"}, "r_o = { typical_times = 2, value = 300 }", ("r_o", 40.0, 80.0, "typical")),
        ({}, "r_o = { typical_times = 2, value = 300 }", ("r_o", 300.0, 300.0, "assumed")),
        ({"r_o_max": "0"}, "", ("r_o", 0.0, 0.0, "guaranteed")),
        # Common mode: of the CMRR's sign nothing is known, so that it is nominally none.
        ({"r_icm_min": "10M", "r_icm_typ": "100M"}, "", ("r_icm", 1e-8, 1e-7, "guaranteed")),
        ({"cmrr_db_min": "80", "cmrr_db_typ": "100"}, "", ("cmrr", 0.0, 1e-4, "guaranteed")),
        ({"cmrr_typ": "1e5"}, "cmrr = { typical_times = 0.5 }", ("cmrr", 0.0, 2e-5, "typical")),
        ({}, "cmrr = { value = 1000 }", ("cmrr", 0.0, 1e-3, "assumed")),
        ({}, "", ("r_o", 0.0, 0.0, "missing")),
    ],
)
def test_a_figure_and_its_evidence(
    write_job: JobWriter, cells: dict[str, str], assume: str, wanted: tuple[str, float, float, str]
) -> None:
    parts = load(write_job(f"[assume]\n{assume}\n", parts=[BLANK | cells]))
    quantity, nominal, worst, evidence = wanted
    *found, rests_on = departure(parts, quantity)
    assert found == pytest.approx([nominal, worst], rel=1e-14)
    assert rests_on == evidence


@pytest.mark.parametrize(
    ("columns", "assume", "not_modelled"),
    [
        (["a_ol_min", "r_id_min", "r_o_max"], "", ()),
        (["a_ol_min", "r_id_typ", "r_o_typ"], "", ()),
        (["a_ol_db_typ"], "", ("r_id", "r_o")),
        (["a_ol_min", "r_o_max"], "", ("r_id",)),
        (["a_ol_min"], "r_o = { value = 100 }", ("r_id",)),
        (["a_ol_min"], "r_o = { typical_times = 2 }", ("r_id", "r_o")),
    ],
)
def test_what_has_no_column_and_no_stand_in_is_not_modelled(
    write_job: JobWriter, columns: list[str], assume: str, not_modelled: tuple[str, ...]
) -> None:
    row = {"part": "amp", **dict.fromkeys(columns, "100")}
    parts = load(write_job(f"[assume]\n{assume}\n", parts=[row]))
    assert parts.not_modelled(at_frequency=False) == (*not_modelled, "r_icm", "cmrr")
    assert {departure(parts, quantity) for quantity in not_modelled} <= {(0.0, 0.0, "guaranteed")}


def test_what_is_not_modelled_is_a_warning(write_job: JobWriter) -> None:
    job = write_job(parts="part,a_ol_min\namp,100\n")
    assert service.prepare(job).warnings() == tuple(
        f"{job.parent / 'parts.csv'}: there is no column for {quantity}; it is not modelled"
        for quantity in ("r_id", "r_o")
    )


@pytest.mark.parametrize(
    ("header", "words"),
    [
        ("Part,a_ol_min", "the column 'part' is missing; did you mean 'Part'?"),
        ("part,r_id_min", "the open-loop gain is missing; a column a_ol_min or"),
    ],
)
def test_a_missing_column_ends_the_job(write_job: JobWriter, header: str, words: str) -> None:
    with pytest.raises(InputError, match=words.replace("?", r"\?")):
        load(write_job(parts=f"{header}\namp,100\n"))


@pytest.mark.parametrize(("rows", "words"), [("", "has no rows"), ("amp,x\n", "none of its 1 rows")])
def test_a_table_without_a_usable_row_ends_the_job(write_job: JobWriter, rows: str, words: str) -> None:
    with pytest.raises(InputError, match=words):
        load(write_job(parts=f"part,a_ol_min\n{rows}"))


def test_an_unknown_column_is_named_with_the_nearest(write_job: JobWriter) -> None:
    job = write_job(parts=[GOOD | {"r_o_min": "1", "family": "fast"}])
    source = job.parent / "parts.csv"
    assert load(job).warnings == (
        f"{source}: column 'r_o_min' is not known and not read; did you mean 'r_id_min'?",
        f"{source}: column 'family' is not known and not read",
    )


def test_both_rows_of_a_repeated_name_are_rejected(write_job: JobWriter) -> None:
    found = load(write_job(parts=[GOOD | {"part": name} for name in ("a", "b", "a")]))
    assert [(r.row, r.column, r.value) for r in found.rejects] == [(2, "part", "a"), (4, "part", "a")]
    assert found.names.tolist() == ["b"]


def test_parts_are_ordered_by_name_with_their_figures(write_job: JobWriter) -> None:
    rows = [GOOD | {"part": name, "a_ol_min": gain} for name, gain in (("b", "200"), ("a", "100"), ("B", "400"))]
    parts = load(write_job(parts=rows))
    assert parts.names.tolist() == ["B", "a", "b"]
    assert (1.0 / parts.worst[0]).tolist() == pytest.approx([400.0, 100.0, 200.0])
