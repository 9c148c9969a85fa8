"""`gainassay map`: a proposal that a person reviews, and that reads right where it is not in doubt."""

from __future__ import annotations

import json
import tomllib
from pathlib import Path
from typing import TYPE_CHECKING, Any

import openpyxl
import pytest

from gainassay import service
from gainassay.forms.departures import AT_DC

if TYPE_CHECKING:
    from conftest import CommandLineHere, JobWriter

THEIRS = (
    "Part No.;Zin diff min (MOhm);Avol min [V/mV];Rout typ;Rout max (Ohm);Package\n"
    "A1;1,5;200;50 Ohm;75;SO\nA2;2;100;40 Ohm;50;SO\n"
)


def proposed(here: CommandLineHere, table: Path, *more: str) -> dict[str, Any]:
    """A proposal, as a job would take it."""
    return tomllib.loads(here("map", table, *more).out)


def test_a_table_of_another_country_becomes_a_job(here: CommandLineHere, write_job: JobWriter) -> None:
    home = write_job(parts=THEIRS.encode("cp1252")).parent
    out = here("map", home / "parts.csv").out
    (home / "job.toml").write_text(f'stages.from = "stages.csv"\n{out}', encoding="utf-8")
    parts = service.prepare(home / "job.toml").parts
    assert parts.names.tolist() == ["A1", "A2"]
    assert parts.worst[AT_DC, 0].tolist() == [1 / 2e5, 1 / 1.5e6, 75.0, 0.0, 0.0]
    assert parts.nominal[2].tolist() == [50.0, 40.0]
    assert '# "Package" is like no column' in out


@pytest.mark.parametrize(
    ("header", "cells", "wanted"),
    [
        ("a_ol_min", ["1e5"], None),
        ("Open-loop gain, min (dB)", ["110", "120"], "a_ol_db_min"),
        ("AOL typ [V/uV]", ["0.2"], {"is": "a_ol_typ", "unit": "V/uV"}),
        ("Input resistance (typ.)", ["1M", "2M"], "r_id_typ"),
        ("R_ID_MIN", ["1M"], "r_id_min"),
        ("Zout_max_ohm", ["75"], "r_o_max"),
        ("Aol min [dB]", ["90", "95"], "a_ol_db_min"),
        ("AOL_MIN_DB", ["90", "95"], "a_ol_db_min"),
        ("AolMin (dB)", ["90", "95"], "a_ol_db_min"),
        ("A_OL_MIN_HOT [dB]", ["90", "95"], "a_ol_db_min_hot"),
        ("Gain bandwidth typ (MHz)", ["1"], {"is": "gbw_typ", "unit": "MHz"}),
        ("Common mode input resistance typ", ["1G"], "r_icm_typ"),
        ("Colour", ["red"], None),
    ],
)
def test_what_a_header_may_mean(
    here: CommandLineHere, tmp_path: Path, header: str, cells: list[str], wanted: object
) -> None:
    path = tmp_path / "parts.csv"
    path.write_text(f'part,"{header}"\n' + "".join(f'amp-{n},"{cell}"\n' for n, cell in enumerate(cells)))
    assert proposed(here, path)["parts"].get("columns", {}).get(header) == wanted


@pytest.mark.parametrize(
    ("header", "cells", "doubt"),
    [
        ("Zin (MOhm)", ["1", "2"], "its header says neither min nor typ nor max"),
        ("Rid min", ["1", "2"], "their middle, 1.5 ohm, is unusual; is the unit another?"),
        ("Aol min", ["110", "120"], "their middle, 115 V/V, is unusual"),
        ("Rid max", ["1M", "2M"], "there is no column for its max"),
        ("Rid min (mohm)", ["1", "2"], "is the unit another?"),
        ("Rout max", ["n/a", "-"], "a cell stands for nothing known"),
    ],
)
def test_what_is_in_doubt_is_no_part_of_the_proposal(
    here: CommandLineHere, tmp_path: Path, header: str, cells: list[str], doubt: str
) -> None:
    path = tmp_path / "parts.csv"
    path.write_text(f'part,"{header}"\n' + "".join(f"{n},{cell}\n" for n, cell in enumerate(cells)))
    assert header not in proposed(here, path)["parts"].get("columns", {})
    (line,) = [line for line in here("map", path).out.splitlines() if line.startswith("# in doubt: ")]
    assert doubt in line


@pytest.mark.parametrize("name", ["a" * 5_000, "gone.csv"])
def test_a_table_that_cannot_be_read_is_refused(here: CommandLineHere, name: str) -> None:
    assert "Traceback" not in here("map", name, status=2).err


def test_two_columns_that_may_be_the_same_are_both_in_doubt(here: CommandLineHere, tmp_path: Path) -> None:
    path = tmp_path / "parts.csv"
    path.write_text("Part,Device,Rid min\na,b,1M\n")
    found = proposed(here, path)["parts"]["columns"]
    assert found == {"Rid min": "r_id_min"}
    assert here("map", path).out.count("several columns may be this one") == 2


@pytest.mark.parametrize(
    ("header", "kept", "left"),
    [
        ("Aol min,Aol min (dB)", {"Aol min": "a_ol_min"}, "Aol min (dB)"),
        ("Aol min (dB),Aol min", {"Aol min (dB)": "a_ol_db_min"}, "Aol min"),
        ("a_ol_min,Aol min (dB)", {}, "Aol min (dB)"),
    ],
)
def test_one_of_two_columns_for_one_figure_is_proposed(
    here: CommandLineHere, tmp_path: Path, header: str, kept: dict[str, str], left: str
) -> None:
    path = tmp_path / "parts.csv"
    path.write_text(f"part,{header}\na,{'100,1e5' if header.startswith('Aol min (dB)') else '1e5,100'}\n")
    assert proposed(here, path)["parts"].get("columns", {}) == kept
    (doubt, line) = [line for line in here("map", path).out.splitlines() if line.startswith("# ")][-2:]
    assert "gives the same figure, and a row may give only one of the two" in doubt
    assert line.startswith(f'# "{left}" = ')


def test_stages_of_a_workbook(here: CommandLineHere, tmp_path: Path) -> None:
    book = openpyxl.Workbook()
    for row in (
        ["Gain stages"],
        ["Stage name", "Topology", "R 1 (kOhm)", "r2", "Accuracy (%)"],
        ["a", "inverting", 1, 1e4, 1],
    ):
        book.active.append(row)
    book.save(tmp_path / "stages.xlsx")
    found = proposed(here, tmp_path / "stages.xlsx", "--as", "stages", "--header-row", "2")["stages"]
    assert found["header_row"] == 2
    assert found["columns"] == {
        "Stage name": "stage",
        "Topology": "topology",
        "R 1 (kOhm)": {"is": "r1", "unit": "kohm"},
        "Accuracy (%)": "accuracy_pct",
    }


def test_names_that_only_a_quoted_key_can_hold(here: CommandLineHere, tmp_path: Path) -> None:
    path = tmp_path / "parts.csv"
    path.write_text('part,"Rid ""min"" \\ 😀 (Mohm)"\na,1\n', encoding="utf-8")
    assert proposed(here, path)["parts"]["columns"] == {'Rid "min" \\ 😀 (Mohm)': {"is": "r_id_min", "unit": "Mohm"}}


def test_a_program_reads_it_too(here: CommandLineHere, write_job: JobWriter) -> None:
    found = json.loads(here("map", write_job(parts=THEIRS).parent / "parts.csv", "--json").out)
    assert found["source"]["delimiter"] == ";"
    assert found["guesses"][0]["ours"] == "part"


@pytest.mark.parametrize("name", ["none.csv", "a.xyz"])
def test_a_table_that_cannot_be_read(here: CommandLineHere, tmp_path: Path, name: str) -> None:
    (tmp_path / "a.xyz").write_text("part\na\n")
    assert str(tmp_path / name) in here("map", tmp_path / name, status=2).err
