"""Tables as files hold them: every cell as it stands, every row under its number, or one clear refusal."""

from __future__ import annotations

import datetime
import decimal
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from gainassay.contracts import tables
from gainassay.errors import InputError
from gainassay.job import Source
from gainassay.tables import sources
from gainassay.tables.checks import Checking
from gainassay.tables.raw import RawTable


def read(path: Path, **said: Any) -> RawTable:
    """A table as read, with what a job says of it."""
    known = {column.name: column for column in tables.columns("parts")}
    return sources.read(Source("parts", str(path), **said), known)


def read_csv(folder: Path, content: bytes) -> RawTable:
    """A CSV file as read."""
    path = folder / "table.csv"
    path.write_bytes(content)
    return read(path)


def refusal(folder: Path, content: bytes, name: str = "table.csv") -> str:
    """The message for a file that cannot be read."""
    path = folder / name
    path.write_bytes(content)
    with pytest.raises(InputError) as refused:
        read(path)
    assert str(refused.value).startswith(f"{path}: ")
    return str(refused.value)


def cells(table: RawTable) -> dict[str, list[Any]]:
    """The cells, as Python has them."""
    return {name: values.to_pylist() for name, values in table.columns.items()}


@pytest.mark.parametrize(
    ("content", "rows"),
    [
        pytest.param(b"a,b\n1,2\n3,4\n", [2, 3], id="plain"),
        pytest.param(b"a,b\n1,2\n3,4", [2, 3], id="no newline at the end"),
        pytest.param(b"\xef\xbb\xbfa,b\n1,2\n3,4\n", [2, 3], id="byte order mark"),
        pytest.param(b"a,b\r\n1,2\r\n3,4\r\n", [2, 3], id="CRLF"),
        pytest.param(b"a,b\r1,2\r3,4\r", [2, 3], id="CR"),
        pytest.param(b'"a","b"\n"1","2"\n"3","4"\n', [2, 3], id="quoted"),
        pytest.param(b"a,b\n\n1,2\n\n\n3,4\n", [3, 6], id="blank lines"),
        pytest.param(b"a,b\r\n1,2\r\n\r\n3,4\r\n", [2, 4], id="blank CRLF lines"),
        pytest.param(b"a,b\n1,2\n,\n ,\t\n3,4\n", [2, 5], id="rows of blank cells"),
    ],
)
def test_rows_keep_their_numbers(tmp_path: Path, content: bytes, rows: list[int]) -> None:
    table = read_csv(tmp_path, content)
    assert cells(table) == {"a": ["1", "3"], "b": ["2", "4"]}
    assert table.rows.tolist() == rows
    assert table.ragged == ()


@pytest.mark.parametrize(
    ("content", "found"),
    [
        pytest.param(b'a,b\n"x\ny",2\n3,4\n', ["x\ny", "3"], id="newline"),
        pytest.param(b'a,b\n"x\r\ny",2\n3,4\n', ["x\r\ny", "3"], id="CRLF"),
        pytest.param(b'a,b\n"x,y",2\n3,4\n', ["x,y", "3"], id="comma"),
        pytest.param(b'a,b\n"x""y",2\n3,4\n', ['x"y', "3"], id="quote"),
        pytest.param(b'a,b\nx"y,2\n3,4\n', ['x"y', "3"], id="quote in the middle"),
        pytest.param(b"a,b\nx\x00y,2\n3,4\n", ["x\x00y", "3"], id="NUL"),
        pytest.param("a,b\nµΩ,2\n3,4\n".encode(), ["µΩ", "3"], id="not ASCII"),
        pytest.param(b"a,b\n" + b"x" * 1_000_000 + b",2\n3,4\n", ["x" * 1_000_000, "3"], id="a million characters"),
        pytest.param(b"a,b\nNA,2\nnull,4\n", ["NA", "null"], id="words for nothing"),
        pytest.param(b"a,b\n007,2\n1e3,4\n", ["007", "1e3"], id="text that looks like a number"),
    ],
)
def test_a_cell_is_kept_as_it_stands(tmp_path: Path, content: bytes, found: list[str]) -> None:
    table = read_csv(tmp_path, content)
    assert cells(table) == {"a": found, "b": ["2", "4"]}
    assert table.rows.tolist() == [2, 3]


def test_rows_of_another_length_are_set_aside(tmp_path: Path) -> None:
    table = read_csv(tmp_path, b'a,b\n"x\ny",2\n3\n\n4,5,6\n7,8\n')
    assert table.rows.tolist() == [2, 6]
    assert [(r.row, r.value, r.reason.split(";")[0]) for r in table.ragged] == [
        (3, "3", "the row has 1 cells, the header has 2"),
        (5, "4,5,6", "the row has 3 cells, the header has 2"),
    ]


def test_row_numbers_hold_far_into_a_large_file(tmp_path: Path) -> None:
    lines = [b"%d,%s" % (row, b"x" * 40) for row in range(2, 60_002)]
    lines[100 - 2] = b"ragged"
    lines[30_000 - 2] = b""
    lines[50_000 - 2] = b"ragged"
    table = read_csv(tmp_path, b"a,b\n" + b"\n".join(lines))
    assert [reject.row for reject in table.ragged] == [100, 50_000]
    assert table.columns["a"].to_pylist() == [str(row) for row in table.rows.tolist()]


@pytest.mark.parametrize(
    "content",
    [
        pytest.param(b'part,family\namp-1,"bipolar\namp-2,JFET\namp-3,CMOS\n', id="in the last column"),
        pytest.param(b'family,part\n"bipolar,amp-1\nJFET,amp-2\nCMOS,amp-3\n', id="in the first column"),
    ],
)
def test_a_quote_that_is_never_closed_loses_no_row_in_silence(tmp_path: Path, content: bytes) -> None:
    try:
        table = read_csv(tmp_path, content)
    except InputError:
        return
    assert len(table.rows) + len(table.ragged) == 3 or table.ragged


@pytest.mark.parametrize(
    ("content", "words"),
    [
        pytest.param(b"", "row 1 holds no column names", id="empty"),
        pytest.param(b"\xef\xbb\xbf", "row 1 holds no column names", id="byte order mark only"),
        pytest.param(b"\n\n", "row 1 holds no column names", id="blank lines only"),
        pytest.param(b",,\n1,2,3\n", "row 1 holds no column names", id="blank header"),
        pytest.param(b"a,b,a\n1,2,3\n", "columns stand more than once in the header: 'a'", id="repeated column"),
        pytest.param(b"a,b\n\xe9,2\n", "UTF-8", id="Latin-1"),
        pytest.param(b"a,\xe9\n1,2\n", "UTF-8", id="Latin-1 header"),
        pytest.param(b"a,b\n" + b"1,2\n" * 500_000 + b"\xe9,2\n", "UTF-8", id="Latin-1 far down"),
        pytest.param(b"a,b\n" + b"1,2\n" * 500_000 + b"\xe9\n", "UTF-8", id="Latin-1 in a ragged row"),
        pytest.param("a,b\n1,2\n".encode("utf-16"), "UTF-8", id="UTF-16"),
        pytest.param(b'a,"b\n1,2\n', "remove the quote", id="quote not closed in the header"),
        pytest.param(b"a," + b"b" * 1_000_000 + b"\n1,2\n", "CSV", id="a column name of a million characters"),
    ],
)
def test_what_is_no_csv_table(tmp_path: Path, content: bytes, words: str) -> None:
    assert words in refusal(tmp_path, content)


def test_a_header_alone_is_a_table_without_rows(tmp_path: Path) -> None:
    assert cells(read_csv(tmp_path, b"a,b\n")) == {"a": [], "b": []}


def test_a_header_without_its_newline_is_a_table_without_rows(tmp_path: Path) -> None:
    assert cells(read_csv(tmp_path, b"a,b")) == {"a": [], "b": []}


@pytest.mark.parametrize("at", ["", "/*.csv"])
def test_a_link_to_nothing_is_not_passed_over(tmp_path: Path, at: str) -> None:
    (tmp_path / "a.csv").write_text("part,a_ol_min\na,1\n")
    (tmp_path / "b.csv").symlink_to("gone.csv")
    with pytest.raises(InputError, match=r"b\.csv: there is no such file"):
        sources.read(Source("parts", f"{tmp_path}{at}"), {})


def test_a_folder_that_cannot_be_looked_into_is_not_passed_over(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "a.csv").write_text("part,a_ol_min\na,1\n")
    (tmp_path / "locked").mkdir()
    scandir = os.scandir

    def locked(path: Any) -> Any:
        if str(path).endswith("locked"):
            raise PermissionError(13, "Permission denied", str(path))
        return scandir(path)

    monkeypatch.setattr(os, "scandir", locked)
    with pytest.raises(InputError, match="Permission denied"):
        sources.read(Source("parts", str(tmp_path)), {})


def test_a_link_to_a_folder_is_not_passed_over(tmp_path: Path) -> None:
    for place in ("here", "there"):
        (tmp_path / place).mkdir()
        (tmp_path / place / "a.csv").write_text("part,a_ol_min\na,1\n")
    (tmp_path / "here" / "_own").symlink_to(tmp_path / "there")
    assert len(sources.read(Source("parts", str(tmp_path / "here")), {}).rows) == 1
    (tmp_path / "here" / "linked").symlink_to(tmp_path / "there")
    with pytest.raises(InputError, match=r"linked: is a link to a folder, which is not followed"):
        sources.read(Source("parts", str(tmp_path / "here")), {})
    assert len(sources.read(Source("parts", f"{tmp_path}/here/*/*.csv"), {}).rows) >= 1


def test_a_pipe_is_not_waited_for(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "table.csv")
    with pytest.raises(InputError, match="is no file"):
        sources.read(Source("parts", str(tmp_path / "table.csv")), {})


@pytest.mark.parametrize("name", ["table.xls", "table", "table.csv.gz", "table.txt"])
def test_another_suffix_is_refused(tmp_path: Path, name: str) -> None:
    assert "use .csv, .parquet" in refusal(tmp_path, b"a,b\n1,2\n", name)


CSV_OF_OTHERS: dict[str, tuple[dict[str, Any], str, str]] = {
    "semicolons": ({"delimiter": ";"}, "a;b\n1,5;x\n", "utf-8"),
    "tabs": ({"delimiter": "\t"}, "a\tb\n1,5\tx\n", "utf-8"),
    "bars": ({"delimiter": "|"}, "a|b\n1,5|x\n", "utf-8"),
    "cp1252": ({"encoding": "cp1252"}, 'a,b\n"1,5",µΩ€\n'.replace("Ω", ""), "cp1252"),
    "Latin-1": ({"encoding": "latin-1"}, 'a,b\n"1,5",µ\n', "latin-1"),
    "UTF-16": ({"encoding": "utf-16"}, 'a,b\n"1,5",µΩ\n', "utf-16"),
    "UTF-16, tabs": ({"encoding": "utf-16", "delimiter": "\t"}, "a\tb\r\n1,5\tΩ\r\n", "utf-16"),
    "byte-order mark, semicolons": ({"delimiter": ";"}, "a;b\n1,5;Ω\n", "utf-8-sig"),
    "UTF-8 by name": ({"encoding": "utf-8"}, 'a,b\n"1,5",Ω\n', "utf-8-sig"),
    "lines above the header": ({"header_row": 4}, 'Parts of 2031\n\n;;\na,b\n"1,5",x\n', "utf-8"),
}


@pytest.mark.parametrize("name", CSV_OF_OTHERS)
def test_csv_as_others_write_it(tmp_path: Path, name: str) -> None:
    said, text, encoding = CSV_OF_OTHERS[name]
    path = tmp_path / "table.csv"
    path.write_bytes(text.encode(encoding))
    table = read(path, **said)
    row = text.splitlines()[-1]
    assert table.columns["a"].to_pylist() == ["1,5"]
    assert row.endswith(table.columns["b"][0].as_py())
    assert table.rows.tolist() == [len(text.splitlines())]


@pytest.mark.parametrize(
    ("said", "content", "words"),
    [
        ({"encoding": "klingon"}, b"a,b\n", "'klingon' is no encoding"),
        ({"encoding": "base64"}, b"a,b\n", "'base64' is no encoding"),
        ({"encoding": "ascii"}, b"a,b\n\xe9,1\n", "is not ASCII text (byte 4)"),
        ({"encoding": "utf-16"}, b"a,b\n1,2\n3", "is not UTF-16 text"),
        ({"encoding": "cp1252"}, b"a,b\n\x81,2\n", "is not CP1252 text (byte 4)"),
        ({}, b"\xff\xfea\x00,\x00b\x00\n\x00", 'say encoding = "utf-16" in the job'),
        ({"header_row": 9}, b"a,b\n1,2\n", "row 9 holds no column names"),
        ({"header_row": 2}, b'"a\nb",1\na,b\n1,2\n', "runs over the end of the line"),
    ],
)
def test_what_a_job_may_not_say_of_a_csv_file(tmp_path: Path, said: dict[str, Any], content: bytes, words: str) -> None:
    path = tmp_path / "table.csv"
    path.write_bytes(content)
    with pytest.raises(InputError) as refused:
        read(path, **said)
    assert words in str(refused.value)


def test_rows_below_a_header_further_down_keep_their_numbers(tmp_path: Path) -> None:
    path = tmp_path / "table.csv"
    path.write_bytes(b"title\n\na,b\n1,2\n3\n5,6\n")
    table = read(path, header_row=3)
    assert table.rows.tolist() == [4, 6]
    assert [reject.row for reject in table.ragged] == [5]


@pytest.mark.parametrize("at", ["", "*.parquet", "**/*.parquet", "[ab].parquet"])
def test_a_folder_or_pattern_of_parquet_files(tmp_path: Path, at: str) -> None:
    for name, columns in (("b", {"x": [3.0], "y": ["q"]}), ("a", {"y": ["o", None, "p"], "x": [1, None, 2]})):
        pq.write_table(pa.table(columns), tmp_path / f"{name}.parquet")
    table = read(tmp_path / at)
    assert cells(table) == {"x": [1.0, 2.0, 3.0], "y": ["o", "p", "q"]}
    assert table.rows.tolist() == [1, 3, 1]
    assert [Path(table.file_of(position)).name for position in range(3)] == ["a.parquet", "a.parquet", "b.parquet"]


def test_what_programs_leave_in_a_folder_is_no_table(tmp_path: Path) -> None:
    for name in ("_delta/a.parquet", ".hidden/a.parquet", ".a.parquet", "_SUCCESS", "year=2031/a.parquet"):
        (tmp_path / name).parent.mkdir(exist_ok=True)
        pq.write_table(pa.table({"x": [name]}), tmp_path / name)
    assert cells(read(tmp_path)) == {"x": ["year=2031/a.parquet"]}


@pytest.mark.parametrize(
    ("files", "at", "words"),
    [
        ({}, "", "there is no such table in it"),
        ({}, "*.parquet", "there is no such table in it"),
        ({"a.csv": b"a\n", "b.parquet": b""}, "", "holds files of several kinds, .csv, .parquet; name one"),
        ({"a.csv": b"a,b\n1,2\n", "c.csv": b"a\n1\n"}, "", "c.csv: lacks the column 'b', which"),
        ({"a.csv": b"a\n1\n", "c.csv": b"a,b\n1,2\n"}, "", "a.csv: lacks the column 'b', which"),
    ],
)
def test_files_that_make_no_table(tmp_path: Path, files: dict[str, bytes], at: str, words: str) -> None:
    for name, content in files.items():
        (tmp_path / name).write_bytes(content)
    with pytest.raises(InputError, match=words):
        read(tmp_path / at)


@pytest.mark.parametrize("name", ["table.csv", "table.parquet"])
def test_a_folder_or_nothing_in_place_of_a_file(tmp_path: Path, name: str) -> None:
    with pytest.raises(InputError, match="there is no such file"):
        read(tmp_path / name)
    (tmp_path / name).mkdir()
    with pytest.raises(InputError, match="there is no such table in it"):
        read(tmp_path / name)


def test_a_path_that_no_file_can_have(tmp_path: Path) -> None:
    with pytest.raises(InputError):
        read(tmp_path / "x\0.csv")
    with pytest.raises(InputError):
        read(tmp_path / f"{'x' * 300}.csv")


DAY = datetime.datetime(2031, 2, 3, tzinfo=datetime.UTC)


@pytest.mark.parametrize(
    ("column", "found"),
    [
        pytest.param(pa.array(["x", None]), ["x", None], id="string"),
        pytest.param(pa.array(["x", None], pa.large_string()), ["x", None], id="large string"),
        pytest.param(pa.array(["x", "y", "x", None]).dictionary_encode(), ["x", "y", "x", None], id="dictionary"),
        pytest.param(pa.array([4700, None]), [4700, None], id="integer"),
        pytest.param(pa.array([4.7, None]), [4.7, None], id="float"),
        pytest.param(pa.array([4.5, None], pa.float32()), [4.5, None], id="single float"),
        pytest.param(pa.array([decimal.Decimal("4700.10"), None]), ["4700.10", None], id="decimal"),
        pytest.param(pa.array([True, None]), ["true", None], id="bool"),
        pytest.param(pa.array([DAY, None]), ["2031-02-03 00:00:00.000000Z", None], id="timestamp"),
        pytest.param(pa.array([b"x", None]), ["x", None], id="binary text"),
        pytest.param(pa.array([None, None], pa.null()), [None, None], id="null"),
    ],
)
def test_columns_of_a_parquet_file(tmp_path: Path, column: pa.Array, found: list[Any]) -> None:
    pq.write_table(pa.table({"key": ["k"] * len(column), "x": column}), tmp_path / "table.parquet")
    table = read(tmp_path / "table.parquet")
    assert table.columns["x"].to_pylist() == found
    assert table.rows.tolist() == list(range(1, len(column) + 1))


def test_a_parquet_row_in_which_nothing_stands_is_passed_over(tmp_path: Path) -> None:
    pq.write_table(pa.table({"a": ["x", " ", "z"], "b": [1.0, None, None]}), tmp_path / "table.parquet")
    assert read(tmp_path / "table.parquet").rows.tolist() == [1, 3]


@pytest.mark.parametrize(
    "column", [pa.array([[1], None]), pa.array([{"x": 1}, None]), pa.array([b"\xff", None])], ids=lambda c: str(c.type)
)
def test_a_column_of_neither_text_nor_number_is_named(tmp_path: Path, column: pa.Array) -> None:
    pq.write_table(pa.table({"x": column}), tmp_path / "table.parquet")
    checking = Checking.of(read(tmp_path / "table.parquet"))
    with pytest.raises(InputError, match="column 'x' holds"):
        checking.cells("x")


def test_parquet_text_that_is_not_utf_8_is_refused(tmp_path: Path) -> None:
    broken = pa.Array.from_buffers(
        pa.string(), 1, [None, pa.array([0, 1], pa.int32()).buffers()[1], pa.py_buffer(b"\xff")]
    )
    pq.write_table(pa.table({"x": broken}), tmp_path / "table.parquet")
    checking = Checking.of(read(tmp_path / "table.parquet"))
    with pytest.raises(InputError, match="not UTF-8"):
        checking.cells("x")


@pytest.mark.parametrize("content", [b"", b"PAR1", b"PAR1....PAR1", b"x" * 1000, b"a,b\n1,2\n"])
def test_what_is_no_parquet_file(tmp_path: Path, content: bytes) -> None:
    assert "cannot be read as Parquet" in refusal(tmp_path, content, "table.parquet")


@pytest.mark.parametrize("keep", [0.2, 0.5, 0.9, 0.99])
def test_a_parquet_file_that_was_cut_off(tmp_path: Path, keep: float) -> None:
    whole = tmp_path / "whole.parquet"
    pq.write_table(pa.table({"part": [f"amp-{n}" for n in range(100)]}), whole)
    content = whole.read_bytes()
    assert "cannot be read as Parquet" in refusal(tmp_path, content[: int(keep * len(content))], "table.parquet")


def test_a_parquet_column_that_stands_twice_is_refused(tmp_path: Path) -> None:
    twice = pa.Table.from_arrays([pa.array(["x"]), pa.array(["y"])], names=["a", "a"])
    pq.write_table(twice, tmp_path / "table.parquet")
    with pytest.raises(InputError):
        read(tmp_path / "table.parquet")


def test_the_folder_of_a_parquet_file_adds_no_column(tmp_path: Path) -> None:
    folder = tmp_path / "year=2031"
    folder.mkdir()
    pq.write_table(pa.table({"a": ["x"]}), folder / "table.parquet")
    assert list(read(folder / "table.parquet").columns) == ["a"]


def test_the_room_works_on_its_own(tmp_path: Path) -> None:
    path = tmp_path / "table.csv"
    path.write_bytes(b"a,b\n1,2\n")
    code = (
        "from gainassay.job import Source; from gainassay.tables import sources; "
        f"sources.read(Source('parts', {str(path)!r}), {{}})"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


def test_a_header_with_spaces_and_nameless_columns(tmp_path: Path) -> None:
    table = read_csv(tmp_path, b" stage ,r1 ,,\na,1,,\nb,2,,\n")
    assert cells(table) == {"stage": ["a", "b"], "r1": ["1", "2"]}


def test_a_nameless_column_that_holds_something_is_refused(tmp_path: Path) -> None:
    assert "column 3 has no name" in refusal(tmp_path, b"stage,r1,\na,1,\nb,2,x\n")


def test_a_stray_quote_does_not_swallow_rows(tmp_path: Path) -> None:
    rows = b"".join(b"s%d,inverting,1k\n" % i for i in range(50))
    content = b"stage,topology,r1\n" + rows.replace(b"s7,", b's7,"', 1)
    assert "remove the quote" in refusal(tmp_path, content)
