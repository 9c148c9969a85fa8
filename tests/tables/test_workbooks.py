"""Tables in .xlsx workbooks: plain values are read, everything else is refused by the name of its cell or column."""

from __future__ import annotations

import datetime
import zipfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import openpyxl
import pytest
import xlsxwriter

from gainassay.contracts import tables
from gainassay.errors import InputError
from gainassay.job import Source
from gainassay.tables import sources, workbooks
from gainassay.tables.checks import Checking
from gainassay.tables.raw import RawTable

Fill = Callable[[Any, Any], object]

ROWS: list[list[Any]] = [
    ["part", "a_ol_min", "r_id_min"],
    ["amp-1", 100_000, "1M"],
    ["amp-2", 2.5e5, None],
    [741, 1, 2],
]


def write(path: Path, rows: list[list[Any]], fill: Fill = lambda *_: None, name: str = "Parts") -> Path:
    """A workbook with a sheet of plain rows, and what else is wanted in it."""
    book = openpyxl.Workbook()
    sheet = book.active
    sheet.title = name
    for row in rows:
        sheet.append(row)
    fill(book, sheet)
    book.save(path)
    return path


def read(path: Path, **said: Any) -> RawTable:
    """A table as read."""
    known = {column.name: column for column in tables.columns("parts")}
    return sources.read(Source("parts", str(path), **said), known)


def refusal(path: Path, **said: Any) -> str:
    """Why a workbook is refused."""
    with pytest.raises(InputError) as refused:
        read(path, **said)
    assert str(refused.value).startswith(str(path))
    return str(refused.value)


def test_plain_values(tmp_path: Path) -> None:
    found = read(write(tmp_path / "a.xlsx", ROWS))
    assert {name: cells.to_pylist() for name, cells in found.columns.items()} == {
        "part": ["amp-1", "amp-2", "741"],
        "a_ol_min": [1e5, 2.5e5, 1.0],
        "r_id_min": ["1M", None, "2"],
    }
    assert found.rows.tolist() == [2, 3, 4]
    assert found.source == f"{tmp_path / 'a.xlsx'}, sheet 'Parts'"


def test_a_header_further_down_blank_rows_and_a_ragged_end(tmp_path: Path) -> None:
    rows = [["Parts of 2031"], [], ROWS[0], ROWS[1], [], [None, None, None, " "], ROWS[2], ["amp-3"]]
    found = read(write(tmp_path / "a.xlsx", rows), header_row=3)
    assert found.columns["part"].to_pylist() == ["amp-1", "amp-2", "amp-3"]
    assert found.rows.tolist() == [4, 7, 8]


def two_sheets(book: Any, _: Any) -> None:
    """A second sheet, and a third that is hidden."""
    book.create_sheet("Old").append(["part"])
    book.create_sheet("Secret").sheet_state = "hidden"


def test_the_sheet_is_the_one_that_is_named_or_the_only_visible_one(tmp_path: Path) -> None:
    path = write(tmp_path / "a.xlsx", ROWS, two_sheets)
    assert list(read(path, sheet="Old").columns) == ["part"]
    assert "it has several sheets, or none" in refusal(path)
    assert "it has 'Parts', 'Old'" in refusal(path, sheet="old")

    def hide(book: Any, _: Any) -> None:
        book.create_sheet("Secret").sheet_state = "hidden"

    assert len(read(write(tmp_path / "b.xlsx", ROWS, hide)).rows) == 3


def put(cell: str, value: Any) -> Fill:
    """Puts a value into a cell."""
    return lambda _, sheet: sheet.__setitem__(cell, value)


def show(cell: str, number_format: str) -> Fill:
    """Gives a cell a format for its number."""
    return lambda _, sheet: setattr(sheet[cell], "number_format", number_format)


@pytest.mark.parametrize(
    ("fill", "column", "row", "words"),
    [
        (put("B3", "=1+1"), "a_ol_min", 3, "is a formula, and formulas are not evaluated"),
        (put("A3", '="amp-"&2'), "part", 3, "is a formula, and formulas are not evaluated"),
        (put("B3", "#DIV/0!"), "a_ol_min", 3, "is a spreadsheet's error"),
        (put("A3", "#N/A"), "part", 3, "is a spreadsheet's error"),
        (put("B3", datetime.datetime(2031, 2, 3, tzinfo=None)), "a_ol_min", 3, "is a date"),
        (put("A3", datetime.date(2031, 2, 3)), "part", 3, "is a date"),
        (put("B3", datetime.time(4, 7)), "a_ol_min", 3, "is a date"),
        (put("B3", True), "a_ol_min", 3, "is not a number"),
        (show("B3", "0%"), "a_ol_min", 3, "is shown with a sign"),
        (show("B3", "0.00%"), "a_ol_min", 3, "is shown with a sign"),
        (show("B3", '0.0" V/mV"'), "a_ol_min", 3, "is shown with a sign"),
        (show("B3", "0.0\\k"), "a_ol_min", 3, "is shown with a sign"),
        (show("B3", "#,##0,"), "a_ol_min", 3, "is shown with a sign"),
        (put("B3", "1,5"), "a_ol_min", 3, "has a comma"),
        (put("B3", "x" * 30_000), "a_ol_min", 3, "is not a number"),
    ],
)
def test_a_cell_that_is_no_plain_value(tmp_path: Path, fill: Fill, column: str, row: int, words: str) -> None:
    checking = Checking.of(read(write(tmp_path / "a.xlsx", ROWS, fill)))
    checking.names("part")
    checking.column(tables.column("parts", "a_ol_min"))
    (reject,) = checking.found()
    assert (reject.column, reject.row) == (column, row)
    assert words in reject.reason
    assert checking.good().tolist() == [True, False, True]


@pytest.mark.parametrize("plain", ["0.00", "#,##0.00", "0.00E+00", "@", '_-* #,##0.00\\ "-"??_-', "[Red]0.0"])
def test_a_number_may_be_shown_with_fewer_digits_or_in_groups(tmp_path: Path, plain: str) -> None:
    assert not read(write(tmp_path / "a.xlsx", ROWS, show("B3", plain))).flaws


def test_merged_cells_are_refused_each_by_its_place(tmp_path: Path) -> None:
    rows = [ROWS[0], *([f"amp-{n}", n + 1, n + 1] for n in range(5))]
    path = write(tmp_path / "a.xlsx", rows, lambda _, sheet: sheet.merge_cells("B3:B4"))
    checking = Checking.of(read(path))
    checking.column(tables.column("parts", "a_ol_min"))
    assert [(r.row, r.column, r.name) for r in checking.found()] == [(3, "a_ol_min", "amp-1"), (4, "a_ol_min", "amp-2")]
    assert "is one of the merged cells B3:B4" in checking.found()[0].reason


def test_a_formula_in_a_column_that_nothing_reads_harms_nothing(tmp_path: Path) -> None:
    path = write(tmp_path / "a.xlsx", [[*ROWS[0], "price"], [*ROWS[1], "=2*3"]])
    checking = Checking.of(read(path))
    checking.names("part")
    assert not checking.found()


@pytest.mark.parametrize(
    ("rows", "fill", "words"),
    [
        (
            [["part", "x", None]],
            lambda _, sheet: sheet.merge_cells("A1:B1"),
            "the cells A1:B1 in the header are merged",
        ),
        ([["part", "=1+1"]], lambda *_: None, "cell B1, the name of a column, is a formula"),
        ([["part", "part"], ["a", "b"]], lambda *_: None, "columns stand more than once in the header: 'part'"),
        (
            [["part", None, "x"], ["a", "b", "c"]],
            lambda *_: None,
            "cell B2 is filled, but its column has no name in row 1",
        ),
        ([["part"], ["a", "b"]], lambda *_: None, "cell B2 is filled, but its column has no name in row 1"),
        ([], lambda *_: None, "row 1 holds no column names; say header_row"),
        ([[], ["part"]], lambda *_: None, "row 1 holds no column names; say header_row"),
    ],
)
def test_a_sheet_that_holds_no_table(tmp_path: Path, rows: list[list[Any]], fill: Fill, words: str) -> None:
    assert words in refusal(write(tmp_path / "a.xlsx", rows, fill))


@pytest.mark.parametrize("content", [b"", b"part,a\n", b"PK\x03\x04" + b"x" * 100, b"\xd0\xcf\x11\xe0" + b"\0" * 600])
def test_what_is_no_workbook(tmp_path: Path, content: bytes) -> None:
    path = tmp_path / "a.xlsx"
    path.write_bytes(content)
    assert "is no .xlsx workbook, or is protected by a password" in refusal(path)


def damaged(path: Path, member: str, change: Callable[[bytes], bytes | None]) -> Path:
    """A workbook of which one part is changed, or left out."""
    good = path.with_suffix(".good.xlsx")
    with xlsxwriter.Workbook(good) as book:
        sheet = book.add_worksheet("Parts")
        for row, cells in enumerate(ROWS):
            sheet.write_row(row, 0, cells)
    with zipfile.ZipFile(good) as archive, zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as changed:
        for name in archive.namelist():
            content = archive.read(name)
            new = change(content) if name == member else content
            if new is not None:
                changed.writestr(name, new)
    return path


BILLION = b"""<?xml version="1.0"?><!DOCTYPE x [<!ENTITY a "aaaaaaaaaa">%s]><x>&z;</x>""" % b"".join(
    b'<!ENTITY %c "%s">' % (ord("a") + n, b"&%c;" % (ord("a") + n - 1) * 10) for n in range(1, 26)
)
SHEET = "xl/worksheets/sheet1.xml"


@pytest.mark.parametrize(
    ("member", "change"),
    [
        (SHEET, lambda _: None),
        (SHEET, lambda content: content[: len(content) // 2]),
        (SHEET, lambda _: b"\0" * 1000),
        (SHEET, lambda _: BILLION),
        ("xl/workbook.xml", lambda _: None),
        ("xl/workbook.xml", lambda _: b"<x/>"),
        ("[Content_Types].xml", lambda _: None),
        ("xl/sharedStrings.xml", lambda _: None),
        ("xl/styles.xml", lambda _: b"\xff\xff"),
    ],
)
def test_a_workbook_that_is_damaged(tmp_path: Path, member: str, change: Callable[[bytes], bytes | None]) -> None:
    refusal(damaged(tmp_path / "a.xlsx", member, change))


def test_a_workbook_that_would_fill_the_memory_is_refused_by_its_size(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(workbooks, "MOST_BYTES", 10_000_000)
    path = damaged(tmp_path / "a.xlsx", SHEET, lambda content: content + b" " * 20_000_000)
    assert path.stat().st_size < 100_000
    assert "at most are read; save the table as CSV" in refusal(path)


def test_a_row_far_beyond_the_format_is_refused(tmp_path: Path) -> None:
    far = damaged(tmp_path / "a.xlsx", SHEET, lambda content: content.replace(b'<row r="4"', b'<row r="99999999"'))
    assert "more than the format allows" in refusal(far)


def test_a_workbook_of_another_writer(tmp_path: Path) -> None:
    with xlsxwriter.Workbook(tmp_path / "a.xlsx", {"constant_memory": True}) as book:
        sheet = book.add_worksheet("Parts")
        for row, cells in enumerate(ROWS):
            for column, cell in enumerate(cells):
                if cell is not None:
                    sheet.write(row, column, cell)
        sheet.write_string(4, 0, "=1+1")
        sheet.write_string(4, 1, "=1+1")
    checking = Checking.of(read(tmp_path / "a.xlsx"))
    assert checking.names("part").tolist() == ["amp-1", "amp-2", "741", "=1+1"]
    checking.column(tables.column("parts", "a_ol_min"))
    assert [reject.reason for reject in checking.found()] == [
        "is a formula, and text is never evaluated; give its value"
    ]
