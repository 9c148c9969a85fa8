"""`gainassay columns`, the page that it writes, and what a shell completes."""

from __future__ import annotations

import json
import os
import subprocess
from pathlib import Path
from typing import TYPE_CHECKING

import pytest

from gainassay.contracts import documents, tables

if TYPE_CHECKING:
    from conftest import CommandLine, CommandLineHere

PAGE = Path(__file__).resolve().parents[2] / "schemas" / "columns.md"


def test_every_column_of_the_tables_that_users_write(here: CommandLineHere) -> None:
    out = here("columns").out
    for table in ("stages", "parts"):
        for column in tables.columns(table):
            assert f"  {column.name} " in out
            assert column.meaning in out


def test_one_column(here: CommandLineHere) -> None:
    out = here("columns", "r_id_min").out
    assert "Part table" in out
    assert "ohm   above 0  Differential input resistance, guaranteed lower limit" in out
    assert "a_ol_min" not in out
    assert json.loads(here("columns", "r_id_min", "--json").out)["parts"][0]["unit"] == "ohm"


def test_a_column_that_is_not_there_names_the_nearest(here: CommandLineHere) -> None:
    assert "there is no column 'r_id_mni'; did you mean 'r_id_min'?" in here("columns", "r_id_mni", status=2).err


def test_the_page_of_columns_is_up_to_date(here: CommandLineHere) -> None:
    """Made anew by: gainassay columns --page > schemas/columns.md"""
    assert PAGE.read_text(encoding="utf-8") == here("columns", "--page").out


def test_the_page_has_every_column_and_every_key() -> None:
    page = PAGE.read_text(encoding="utf-8")
    for table in tables.all_tables():
        assert f"## {tables.title(table)}\n" in page
        assert all(f"| `{column.name}` | {column.unit} |" in page for column in tables.columns(table))
    assert all(
        f"| `{key.path}` | {key.meaning} |" in page.replace("\\", "")
        for key in documents.keys("job")
        if "\\" not in key.meaning
    )


@pytest.mark.parametrize(
    ("words", "some"),
    [
        ("gainassay ", {"check", "columns", "map", "new", "screen"}),
        ("gainassay s", {"sample", "screen"}),
        ("gainassay form inv", {"inverting", "inverting_t"}),
        ("gainassay columns r_o", {"r_o_typ", "r_o_max"}),
        ("gainassay map --as st", {"stages"}),
    ],
)
def test_a_shell_completes_commands_topologies_and_columns(gainassay: CommandLine, words: str, some: set[str]) -> None:
    asked = {"_GAINASSAY_COMPLETE": "bash_complete", "COMP_WORDS": words, "COMP_CWORD": str(words.count(" "))}
    done = subprocess.run(
        [*gainassay.program], env={**os.environ, **asked}, capture_output=True, text=True, check=False
    )
    found = {line.partition(",")[2] for line in done.stdout.splitlines()}
    assert some <= found
    assert all(name.startswith(words.rpartition(" ")[2]) for name in found)
