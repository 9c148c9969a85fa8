"""The user's own names of columns: mapped to ours, with units and with what stands in, and called theirs in rejects."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pytest

from gainassay import job as jobs
from gainassay import service
from gainassay.errors import InputError
from gainassay.forms.departures import AT_DC
from gainassay.tables import parts as parts_table
from gainassay.tables.parts import PartTable

if TYPE_CHECKING:
    from pathlib import Path

    from conftest import CommandLineHere, JobWriter

THEIRS = "Part no.,Zin (MOhm),Gain (V/mV),Ro,Price\nA,1.5,200,75,1\nB,x,100,50 ohm,2\n"

COLUMNS = """
[parts.columns]
"Part no." = "part"
"Zin (MOhm)" = { is = "r_id_min", unit = "Mohm" }
"Gain (V/mV)" = { is = "a_ol_min", unit = "V/mV" }
Ro = "r_o_max"
"""


def load(job: Path) -> PartTable:
    """The parts table of a job."""
    read = jobs.read(job)
    return parts_table.load(read.parts, read.assume)


def test_columns_go_by_their_own_names(write_job: JobWriter) -> None:
    found = load(write_job(COLUMNS, parts=THEIRS))
    assert found.names.tolist() == ["A"]
    assert found.worst[AT_DC, 0].tolist() == [1 / 2e5, 1 / 1.5e6, 75.0, 0.0, 0.0]
    (reject,) = found.rejects
    assert (reject.row, reject.name, reject.column, reject.value) == (3, "B", "Zin (MOhm)", "x")
    assert found.columns.found == ()
    assert found.columns.unknown == ("'Price'",)
    assert "r_o_typ" in found.columns.missing
    assert "r_o_max" not in found.columns.missing


def test_a_value_stands_in_every_row(write_job: JobWriter) -> None:
    job = write_job('[parts.columns]\nr_o_max = { value = "1k2" }\n', parts="part,a_ol_min\nA,1e5\nB,2e5\n")
    found = load(job)
    assert found.worst[2].tolist() == [1200.0, 1200.0]
    assert found.modelled[AT_DC] == (True, False, True, False, False)


def test_what_is_said_of_two_columns_is_called_by_both_names(write_job: JobWriter) -> None:
    job = write_job('[parts.columns]\nAol = "a_ol_min"\n', parts="part,Aol,a_ol_typ\nA,100,200\nB,300,200\n")
    (reject,) = load(job).rejects
    assert (reject.column, reject.value) == ("Aol, a_ol_typ", "300, 200")


@pytest.mark.parametrize(
    ("columns", "words"),
    [
        ('"Zni" = "r_id_min"', "the table has no column 'Zni'; did you mean 'Zin'?"),
        ('Zin = "r_id_mni"', "there is no column 'r_id_mni' to fill; did you mean 'r_id_min'?"),
        ('Zin = "zzz"', "there is no column 'zzz' to fill; `gainassay columns` lists them"),
        ('Zin = "a_ol_min"', "the table has a column 'a_ol_min' of its own; which is meant?"),
        ('Zin = "r_id_min"\nRo = "r_id_min"', "two columns are to fill 'r_id_min'; which is meant?"),
        ('Zin = { is = "r_id_min", unit = "pF" }', "'Zin': 'r_id_min' cannot be in 'pF'; it is in ohm"),
        (
            'Zin = { is = "r_id_min", unit = "mohm" }',
            "'Zin': 'r_id_min' cannot be in 'mohm'; 'm' could be milli or mega",
        ),
        ('part = { value = "A" }', "the table has a column 'part' of its own"),
        ('r_o_max = { value = "low" }', "r_o_max: the value 'low' is not a number"),
        ('r_o_max = { value = "-1" }', "r_o_max: the value '-1' must be at least 0 ohm"),
    ],
)
def test_a_mapping_that_cannot_be(write_job: JobWriter, columns: str, words: str) -> None:
    job = write_job(f"[parts.columns]\n{columns}\n", parts="part,a_ol_min,Zin,Ro\nA,1e5,1M,10\n")
    with pytest.raises(InputError) as refused:
        load(job)
    assert f"{job.parent / 'parts.csv'}: in [parts.columns]: {words}" in str(refused.value)


@pytest.mark.parametrize(
    ("columns", "words"),
    [
        ("Zin = 5", "parts.columns.Zin is 5; wanted is the name of the column that it is"),
        ('Zin = { unit = "Mohm" }', "wanted is the name of the column that it is"),
        ("r_o_max = { value = 5 }", "wanted is the name of the column that it is"),
    ],
)
def test_a_mapping_that_is_none(here: CommandLineHere, write_job: JobWriter, columns: str, words: str) -> None:
    assert words in here("check", write_job(f"[parts.columns]\n{columns}\n"), status=2).err


def test_a_stage_table_of_another_country(write_job: JobWriter) -> None:
    job = write_job(
        """
[stages]
from = "stages.csv"
delimiter = ";"
decimal = ","
[stages.columns]
Name = "stage"
"R in (kOhm)" = { is = "r1", unit = "kohm" }
topology = { value = "inverting" }
""",
        tables='[parts]\nfrom = "parts.csv"\n',
        stages="Name;R in (kOhm);r2;accuracy_pct\na;4,7;47k;0,5\nb;4,7k;47k;0,5\nc;4.7;47k;0,5\n",
    )
    stages = service.prepare(job).stages
    (group,) = stages.groups
    assert group.values[1:3].ravel().tolist() == [4700.0, 47_000.0]
    assert [(r.row, r.name, r.column, r.reason.split(";")[0]) for r in stages.rejects] == [
        (3, "b", "R in (kOhm)", "has a letter for its magnitude in a column that the job states in kohm"),
        (4, "c", "R in (kOhm)", "has a point"),
    ]
