"""Damaged and merely unusual tables: each is read right, or refused so that a person can mend it; nothing is guessed.

Each case is a table of parts, what the job says of it, and what must come out: the open-loop gain of every part that is
used (V/V, as text), and the row, column and first words of every reject; or the words of the one refusal.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

import pytest

from gainassay.errors import InputError
from gainassay.job import Heading, Source
from gainassay.tables import parts

if TYPE_CHECKING:
    from gainassay.tables.parts import PartTable

Outcome = tuple[str, list[str]] | str
Case = tuple[str | bytes, dict[str, Any], Outcome]

GOOD = "part,a_ol_min\na,100000\nb,200000\n"
BOTH = "a=100000 b=200000"
COMMAS = {"delimiter": ";", "decimal": ","}
IN_V_PER_MV = (Heading("a_ol_min", "Avol", "V/mV"),)
IN_MOHM = (Heading("r_id_min", "Rid", "Mohm"),)

CASES: dict[str, Case] = {
    # Ends and beginnings of files
    "plain": (GOOD, {}, (BOTH, [])),
    "no newline at the end": (GOOD.strip(), {}, (BOTH, [])),
    "many newlines at the end": (GOOD + "\n" * 50, {}, (BOTH, [])),
    "CRLF": (GOOD.replace("\n", "\r\n"), {}, (BOTH, [])),
    "CR alone": (GOOD.replace("\n", "\r"), {}, (BOTH, [])),
    "LF and CRLF mixed": ("part,a_ol_min\r\na,100000\nb,200000\r\n", {}, (BOTH, [])),
    "byte-order mark": (b"\xef\xbb\xbf" + GOOD.encode(), {}, (BOTH, [])),
    "blank lines between rows": ("part,a_ol_min\n\na,100000\n\n\nb,200000\n", {}, (BOTH, [])),
    "a row of commas": ("part,a_ol_min\na,100000\n,\nb,200000\n", {}, (BOTH, [])),
    "a row of blanks": ("part,a_ol_min\na,100000\n \t, \nb,200000\n", {}, (BOTH, [])),
    "control-Z at the end": (GOOD + "\x1a", {}, (BOTH, ["4::the row has 1 cells"])),
    "empty": ("", {}, "row 1 holds no column names"),
    "newlines only": ("\n\n\n", {}, "row 1 holds no column names"),
    "header only": ("part,a_ol_min\n", {}, "has no rows"),
    "header only, without a newline": ("part,a_ol_min", {}, "has no rows"),
    "UTF-16 without a mark": (GOOD.encode("utf-16-le"), {}, 'say so in the job: encoding = "utf-16-le"'),
    "UTF-32": (GOOD.encode("utf-32"), {}, 'say encoding = "utf-32"'),
    "UTF-32, said so": (GOOD.encode("utf-32"), {"encoding": "utf-32"}, (BOTH, [])),
    "NUL bytes only": (b"\0" * 500, {}, "a name holds a NUL"),
    # Headers
    "spaces about names": (" part , a_ol_min \na,100000\nb,200000\n", {}, (BOTH, [])),
    "quoted names": ('"part","a_ol_min"\na,100000\nb,200000\n', {}, (BOTH, [])),
    "names in capitals": (GOOD.replace("part", "PART"), {}, "the column 'part' is missing; did you mean"),
    "no header": ("a,100000\nb,200000\n", {}, "the column 'part' is missing"),
    "a title above the header": (
        "Parts of 2031,\n" + GOOD,
        {},
        "column 2 has no name in row 1, but cells that are filled; name it, or say header_row",
    ),
    "a title above, said so": ("Parts of 2031,\n" + GOOD, {"header_row": 2}, (BOTH, [])),
    "duplicated header": ("part,a_ol_min,a_ol_min\na,1,2\n", {}, "stand more than once in the header: 'a_ol_min'"),
    "duplicated by its spaces": ("part,a_ol_min, a_ol_min\na,1,2\n", {}, "stand more than once"),
    "merged headers, exported": ("part,gain,\n,a_ol_min,a_ol_typ\na,1,2\n", {}, "column 3 has no name in row 1"),
    "nameless empty column": ("part,a_ol_min,\na,100000,\nb,200000,\n", {}, (BOTH, [])),
    "nameless filled column": ("part,a_ol_min,\na,100000,x\n", {}, "column 3 has no name in row 1"),
    "units in a second header row": (
        "part,a_ol_min\n,V/V\na,100000\nb,200000\n",
        {},
        (BOTH, ["2:a_ol_min:is not a number", "2:part:is blank"]),
    ),
    "a newline in a name": ('part,"a_ol\n_min"\na,1\n', {}, "runs over the end of the line"),
    "zero-width space in a name": ("part\u200b,a_ol_min\na,1\n", {}, "the column 'part' is missing; did you mean"),
    # Delimiters and quotes
    "semicolons": (GOOD.replace(",", ";"), {}, 'look separated by semicolons: say delimiter = ";"'),
    "tabs": (GOOD.replace(",", "\t"), {}, 'look separated by tabs: say delimiter = "\\t"'),
    "semicolons, said so": (GOOD.replace(",", ";"), {"delimiter": ";"}, (BOTH, [])),
    "commas where semicolons are said": (GOOD, {"delimiter": ";"}, "the column 'part' is missing"),
    "a stray comma": ("part,a_ol_min\na,100,000\nb,200000\n", {}, ("b=200000", ["2::the row has 3 cells"])),
    "a missing comma": ("part,a_ol_min\na\nb,200000\n", {}, ("b=200000", ["2::the row has 1 cells"])),
    "a quoted comma": ('part,a_ol_min\n"a,1",100000\n', {}, ("a,1=100000", [])),
    "a quoted newline in an unread column": ('part,a_ol_min,note\na,100000,"x\ny"\nb,200000,\n', {}, (BOTH, [])),
    "a quoted newline in a name": (
        'part,a_ol_min\n"a\n1",100000\nb,200000\n',
        {},
        ("b=200000", ["2:part:holds a control character"]),
    ),
    "a stray quote": ('part,a_ol_min\na","100000\nb,200000\n', {}, "none of its 1 rows can be used"),
    "a quote never closed": ('part,a_ol_min\na,"100000\nb,200000\n', {}, "a quote is opened and never closed"),
    "inches as a quote": ('part,a_ol_min,size\na,100000,5"\nb,200000,6"\n', {}, (BOTH, [])),
    # Encodings
    "Latin-1": ("part,a_ol_min\né,1\n".encode("latin-1"), {}, "is not UTF-8 text (byte 14)"),
    "Latin-1, said so": ("part,a_ol_min\né,100000\n".encode("latin-1"), {"encoding": "latin-1"}, ("é=100000", [])),
    "cp1252, said so": ("part,a_ol_min\n€,100000\n".encode("cp1252"), {"encoding": "cp1252"}, ("€=100000", [])),
    "UTF-16": (GOOD.encode("utf-16"), {}, 'say encoding = "utf-16"'),
    "UTF-16, said so": (GOOD.encode("utf-16"), {"encoding": "utf-16"}, (BOTH, [])),
    "UTF-16 without its mark": (GOOD.encode("utf-16-le"), {"encoding": "utf-16-le"}, (BOTH, [])),
    "UTF-8 cut in a letter": ("part,a_ol_min\né".encode()[:-1], {}, "is not UTF-8 text"),
    "an encoding that is none": (GOOD, {"encoding": "utf-9"}, "is no encoding of text"),
    "a NUL in a name": ("part,a_ol_min\na\0,1\nb,200000\n", {}, ("b=200000", ["2:part:holds a control character"])),
    "a NUL in a number": ("part,a_ol_min\na,1\x000\nb,200000\n", {}, ("b=200000", ["2:a_ol_min:is not a number"])),
    # Numbers
    "exponents": ("part,a_ol_min\na,1e5\nb,2.0E+05\n", {}, (BOTH, [])),
    "spaces about numbers": ("part,a_ol_min\na,  100000\nb,200000\t\n", {}, (BOTH, [])),
    "prefixes": ("part,a_ol_min\na,100k\nb,0.2 M\n", {}, (BOTH, [])),
    "a mix of units": ("part,a_ol_min\na,100 V/mV\nb,0.2 V/uV\nc,200 k V/V\n", {}, (BOTH, ["4:a_ol_min:"])),
    "decibels among ratios": (GOOD + "c,100 dB\n", {}, (BOTH, ["4:a_ol_min:has 'dB' after the number"])),
    "a unit of another kind": (GOOD + "c,100 ohm\n", {}, (BOTH, ["4:a_ol_min:ends in a unit or word"])),
    "thousands with commas": (GOOD + 'c,"300,000"\n', {}, (BOTH, ["4:a_ol_min:has a comma"])),
    "thousands with spaces": (GOOD + "c,300 000\n", {}, (BOTH, ["4:a_ol_min:has digits in groups"])),
    "thousands with narrow spaces": (GOOD + "c,300\u202f000\n", {}, (BOTH, ["4:a_ol_min:has digits in groups"])),
    "thousands with apostrophes": (GOOD + "c,300'000\n", {}, (BOTH, ["4:a_ol_min:has digits in groups"])),
    "decimal commas": ("part;a_ol_min\na;100000,0\nb;2,0e5\n", COMMAS, (BOTH, [])),
    "decimal commas, not said": (
        "part;a_ol_min\na;1,5\nb;200000\n",
        {"delimiter": ";"},
        ("b=200000", ["2:a_ol_min:has a comma"]),
    ),
    "a point among decimal commas": (
        "part;a_ol_min\na;100.000\nb;200000\n",
        COMMAS,
        ("b=200000", ["2:a_ol_min:has a point"]),
    ),
    "a date in place of a number": (GOOD + "c,2031-02-03\n", {}, (BOTH, ["4:a_ol_min:is a date"])),
    "a short date": (GOOD + "c,3-Feb\n", {}, (BOTH, ["4:a_ol_min:is a date"])),
    "a month and a year": (GOOD + "c,Jan 47\n", {}, (BOTH, ["4:a_ol_min:is a date"])),
    "a date with slashes": (GOOD + "c,02/03/2031\n", {}, (BOTH, ["4:a_ol_min:is a date"])),
    "a formula": (GOOD + "c,=1+1\n", {}, (BOTH, ["4:a_ol_min:is a formula"])),
    "a formula with a call": (GOOD + "c,=HYPERLINK(1)\n", {}, (BOTH, ["4:a_ol_min:is a formula"])),
    "a spreadsheet's error": (GOOD + "c,#VALUE!\n", {}, (BOTH, ["4:a_ol_min:is a spreadsheet's error"])),
    "words for nothing": (
        GOOD + "c,n/a\nd,-\ne,TBD\n",
        {},
        (BOTH, [f"{row}:a_ol_min:stands for nothing known" for row in (4, 5, 6)]),
    ),
    "limits in cells": (
        GOOD + "c,>=300000\nd,300000 min\n",
        {},
        (BOTH, ["4:a_ol_min:says whether", "5:a_ol_min:says whether"]),
    ),
    "a range": (GOOD + "c,100000-200000\n", {}, (BOTH, ["4:a_ol_min:says two numbers"])),
    "infinity": (GOOD + "c,inf\n", {}, (BOTH, ["4:a_ol_min:is not a number"])),
    "nan": (GOOD + "c,nan\n", {}, (BOTH, ["4:a_ol_min:stands for nothing known"])),
    "beyond floating point": (GOOD + "c,1e999\n", {}, (BOTH, ["4:a_ol_min:is infinite or too large"])),
    "beyond all measure": (GOOD + "c,1e99\n", {}, (BOTH, ["4:a_ol_min:is beyond all measure"])),
    "full-width digits": (GOOD + "c,１００\n", {}, (BOTH, ["4:a_ol_min:has digits or powers"])),
    "Arabic digits": (GOOD + "c,٣٠٠\n", {}, (BOTH, ["4:a_ol_min:has digits or powers"])),
    "a minus that is none": (GOOD + "c,−300\n", {}, (BOTH, ["4:a_ol_min:has a minus sign"])),
    "O for 0": (GOOD + "c,1OOOOO\n", {}, (BOTH, ["4:a_ol_min:"])),
    "hexadecimal": (GOOD + "c,0x10\n", {}, (BOTH, ["4:a_ol_min:is not a number"])),
    "underscores": (GOOD + "c,100_000\n", {}, (BOTH, ["4:a_ol_min:has digits in groups"])),
    "TRUE": (GOOD + "c,TRUE\n", {}, (BOTH, ["4:a_ol_min:"])),
    "a footnote": (GOOD + "c,300000*\n", {}, (BOTH, ["4:a_ol_min:has digits or powers"])),
    "a leading apostrophe": (GOOD + "c,'300000\n", {}, (BOTH, ["4:a_ol_min:starts with an apostrophe"])),
    "zero": (GOOD + "c,0\n", {}, (BOTH, ["4:a_ol_min:must be above 0 V/V"])),
    "negative": (GOOD + "c,-300000\n", {}, (BOTH, ["4:a_ol_min:must be above 0 V/V"])),
    "a cell of a million characters": (
        GOOD + f"c,{'9' * 1_000_000}\n",
        {},
        (BOTH, ["4:a_ol_min:is infinite or too large"]),
    ),
    "a name of a million characters": (GOOD + f"{'x' * 1_000_000},1\n", {}, (BOTH, ["4:part:is longer than"])),
    "milli or mega": (
        "part,a_ol_min,r_id_min\na,100000,1 mohm\nb,200000,1 Mohm\n",
        {},
        ("b=200000", ["2:r_id_min:has 'mohm' after the number: 'm' could be milli or mega"]),
    ),
    "letter codes": ("part,a_ol_min,r_id_min\na,100000,4k7\nb,200000,2M2\n", {}, (BOTH, [])),
    "a code of another kind": (GOOD + "c,4k7\n", {}, (BOTH, ["4:a_ol_min:is not a number"])),
    "units by the job": ("part,Avol\na,100\nb,200\n", {"columns": IN_V_PER_MV}, (BOTH, [])),
    "units by the job and by a cell": ("part,Avol\na,100000 V/V\nb,200\n", {"columns": IN_V_PER_MV}, (BOTH, [])),
    "a prefix beside the job's unit": (
        "part,a_ol_min,Rid\na,100000,1\nb,200000,1M\n",
        {"columns": IN_MOHM},
        ("a=100000", ["3:Rid:has a letter for its magnitude"]),
    ),
    # Rows
    "a trailing total": (GOOD + "Total,300000\n", {}, (BOTH, ["4:part:names a total"])),
    "a part of which nothing is known": (GOOD + "c,\n", {}, (f"{BOTH} c=", [])),
    "a note below": (GOOD + "Last changed 2031\n", {}, (BOTH, ["4::the row has 1 cells"])),
    "a repeated name": (
        GOOD + "a,300000\n",
        {},
        ("b=200000", ["2:part:stands more than once", "4:part:stands more than once"]),
    ),
    "a name repeated but for spaces": (
        GOOD + " a ,3\n",
        {},
        ("b=200000", ["2:part:stands more than once", "4:part:stands more than once"]),
    ),
    "a blank name": (GOOD + ",300000\n", {}, (BOTH, ["4:part:is blank"])),
    "every row bad": ("part,a_ol_min\na,x\nb,y\n", {}, "none of its 2 rows can be used"),
    "seven rows, all bad": (
        "part,a_ol_min\n" + "".join(f"{n},x\n" for n in range(7)),
        {},
        "and 2 more; the most frequent reasons",
    ),
    "names that look like formulas": ("part,a_ol_min\n=1+1,100000\n-5V,200000\n", {}, ("-5V=200000 =1+1=100000", [])),
    "names that look like numbers": ("part,a_ol_min\n007,100000\n1e3,200000\n", {}, ("007=100000 1e3=200000", [])),
}  # fmt: skip


def load(folder: Path, content: str | bytes, said: dict[str, Any]) -> PartTable:
    """The parts of a table."""
    path = folder / "parts.csv"
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return parts.load(Source("parts", str(path), **said), {})


def told(found: PartTable) -> str:
    """Every part that is used, with its open-loop gain; nothing where that is missing."""
    gains = [f"{1 / worst:g}" if worst else "" for worst in found.worst[0].tolist()]
    return " ".join(f"{name}={gain}" for name, gain in zip(found.names.tolist(), gains, strict=True))


@pytest.mark.parametrize("name", CASES)
def test_an_unusual_table_is_read_right_or_refused(tmp_path: Path, name: str) -> None:
    content, said, outcome = CASES[name]
    if isinstance(outcome, str):
        with pytest.raises(InputError) as refused:
            load(tmp_path, content, said)
        assert outcome in str(refused.value)
        assert str(tmp_path / "parts.csv") in str(refused.value)
        return
    used, rejects = outcome
    found = load(tmp_path, content, said)
    assert told(found) == used
    assert len(found.rejects) == len(rejects)
    for reject, start in zip(found.rejects, rejects, strict=True):
        assert f"{reject.row}:{reject.column}:{reject.reason}".startswith(start)


def test_there_are_a_hundred_of_them() -> None:
    assert len(CASES) >= 100
