"""Cells of a table as numbers: plain text, SI prefixes and units, codes of IEC 60062; checked and never guessed."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from gainassay.contracts.tables import Column
from gainassay.contracts.units import misread, notation, power_of_ten, spelled

SMALLEST, LARGEST = 1e-60, 1e60
"""Magnitudes beyond which nothing is measured, and products of a few numbers would overflow."""

EXACT = 1 << 53
"""Below this every whole number is a double of its own."""

CELLS_AT_A_TIME = 1 << 16
"""A block of cells with one that is no plain number is looked at text by text; the others are not."""

A_FEW = 16
"""Cells that mostly show whether those of a block are plain numbers."""

NUMBER = r"[+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)"
"""Decimal text. ASCII digits only: other parsers disagree on full-width digits, `1_000`, `0x10` and `1,5`."""

PLAIN = rf"^{NUMBER}(?:[eE][+-]?[0-9]{{1,4}})?$"
WITH_UNIT = rf"^(?P<number>{NUMBER})(?:[eE](?P<exponent>[+-]?[0-9]{{1,3}}))?\s?(?P<unit>[^\s0-9.,+-]\S*(?:\s\S+)?)?$"

LETTERS = {
    "resistance": {"R": 0, "k": 3, "K": 3, "M": 6, "G": 9, "T": 12},
    "capacitance": {"p": -12, "n": -9, "u": -6, "\u00b5": -6, "\u03bc": -6, "m": -3, "F": 0},
}
"""Letters of each code and their powers of ten (IEC 60062). `m` is no resistance: milli or mega?"""

TOLERANCES = {
    "E": 0.005, "L": 0.01, "P": 0.02, "W": 0.05, "B": 0.1, "C": 0.25, "D": 0.5,
    "F": 1.0, "G": 2.0, "H": 3.0, "J": 5.0, "K": 10.0, "M": 20.0, "N": 30.0,
}  # fmt: skip
"""Letters of symmetrical tolerances and what they say [%] (IEC 60062)."""

NOTHING_KNOWN = "stands for nothing known; leave the cell empty"
ONE_OF_TWO = "says two numbers; give the one that the column asks for"
ITS_COLUMN_SAYS = "says whether it is a limit or typical; the column says that, so give the number alone"

CLUTTER = (
    (r"^=", "is a formula, and text is never evaluated; give its value"),
    (r"^#(?:N/A|DIV/0!|REF!|VALUE!|NAME\?|NULL!|NUM!|SPILL!|CALC!)", "is a spreadsheet's error; mend it there"),
    (r"(?i)^(?:-+|\x{2013}|\x{2014}|n\.?/?a\.?|none|null|nil|nan|tbd|tba|unknown|\?+|\*+)$", NOTHING_KNOWN),
    (
        r"(?i)^(?:[0-9]{4}[-/.][0-9]{1,2}[-/.][0-9]{1,2}(?:[ T].*)?|[0-9]{1,2}[-/.][0-9]{1,2}[-/.][0-9]{2,4}(?: .*)?"
        r"|(?:[0-9]{1,2}[-. /])?(?:jan|feb|mar|apr|may|jun|jul|aug|sep|oct|nov|dec|m\x{e4}r|mai|okt|dez)[a-z]*\.?"
        r"(?:[-. /][0-9]{2,4})?)$",
        "is a date, into which spreadsheets turn numbers; write the number that was meant",
    ),
    (r"(?i)^(?:[<>~\x{2264}\x{2265}\x{2248}]|ca\.?\s|approx|about|min|typ|max|nom)", ITS_COLUMN_SAYS),
    (r"(?i)[\s(](?:min|typ|max|nom)[a-z]*\.?\)?$", ITS_COLUMN_SAYS),
    (
        r"(?i)[0-9]\s*(?:\.\.+|\x{2026}|\x{2013}|\bto\b|/|;|\|)\s*[+-]?[0-9.]|[0-9][a-z%\x{3a9}]*\s*-\s*[0-9.]",
        ONE_OF_TWO,
    ),
    (r"^(?:\x{b1}|\+/-|\+-)", "has a sign for plus or minus; give the number alone"),
    (r"^[\x{2212}\x{2013}]", "has a minus sign that is no ASCII '-'; write '-'"),
    (r"^['\x{2019}]", "starts with an apostrophe; give the number alone"),
    (
        r"[\x{ff10}-\x{ff19}\x{660}-\x{669}\x{b2}\x{b3}\x{b9}\x{d7}*^]",
        "has digits or powers that are not plain; write it as 1.5e6",
    ),
    (r"[0-9]['_\s\x{a0}\x{2009}\x{202f}][0-9]", "has digits in groups; write them without"),
)  # fmt: skip
"""What else stands in place of numbers, and what to say of it; the first that fits counts."""


@dataclass(frozen=True)
class Numbers:
    """A column of cells as numbers.

    Attributes
    ----------
    values : ndarray, shape (rows,)
        The numbers; nan where a cell is blank or refused.
    blank : ndarray of bool, shape (rows,)
        Cells in which nothing stands.
    refused : dict[int, str]
        Reason for each refused cell, by its position.
    """

    values: NDArray[np.float64]
    blank: NDArray[np.bool_]
    refused: dict[int, str]

    @staticmethod
    def nothing(count: int) -> Numbers:
        """A column that is not there: blank in each row, and without room of its own."""
        return Numbers(np.broadcast_to(np.nan, count), np.broadcast_to(True, count), {})


@dataclass(frozen=True)
class Writing:
    """How the numbers of a column are written.

    Attributes
    ----------
    unit : str
        Unit of numbers that state none, such as `Mohm`; empty: the column's own.
    decimal : str
        The decimal sign, `.` or `,`.
    """

    unit: str = ""
    decimal: str = "."


def in_text(cells: pa.Array) -> pa.Array:
    """Cells as text: a whole number by its digits, as names are written, another number as its shortest text."""
    text = cells.cast(pa.string())
    if not pa.types.is_floating(cells.type):
        return text
    whole = pc.and_(pc.equal(pc.floor(cells), cells), pc.less(pc.abs(cells), float(EXACT)))
    return pc.coalesce(pc.if_else(whole, cells, None).cast(pa.int64()).cast(pa.string()), text)


def text_of(cells: pa.Array) -> pa.Array:
    """Cells as text without surrounding white space; what is null becomes empty."""
    return pc.utf8_trim_whitespace(pc.fill_null(in_text(cells), ""))


def numbers(cells: pa.Array, column: Column, writing: Writing = Writing()) -> Numbers:
    """The numbers in a column of text or of floating point or integer numbers.

    Parameters
    ----------
    cells : pyarrow.Array
        Strings, or numbers as a Parquet file holds them.
    column : Column
        What the column may hold: its unit and bounds, and whether a letter code is understood.
    writing : Writing
        How the source writes numbers.
    """
    if not pa.types.is_string(cells.type):
        if not writing.unit:
            values = np.asarray(pc.fill_null(cells.cast(pa.float64(), safe=False), np.nan))
            return _within(column, values, np.asarray(cells.is_null()), {})
        # By way of its shortest text a number gets its power of ten exactly, wherever it comes from.
        return numbers(cells.cast(pa.string()), column, Writing(writing.unit))
    values, blank = np.empty(len(cells)), np.empty(len(cells), dtype=bool)
    refused: dict[int, str] = {}
    for start in range(0, len(cells), CELLS_AT_A_TIME):
        block = slice(start, start + CELLS_AT_A_TIME)
        values[block], blank[block], reasons = _block(cells[block], column, writing)
        refused |= {start + place: reason for place, reason in reasons.items()}
    return _within(column, values, blank, refused)


def _block(
    cells: pa.Array, column: Column, writing: Writing
) -> tuple[NDArray[np.float64], NDArray[np.bool_], dict[int, str]]:
    """Values, blanks and refusals of some cells of text."""
    plain = None if writing.unit else _all_plain(cells, writing.decimal)
    if plain is not None:
        return plain, np.asarray(cells.is_null()), {}
    coded = text_of(cells).dictionary_encode()
    values, reasons = _texts(coded.dictionary, column, writing)
    place = np.asarray(coded.indices)
    refused = {text for text, reason in enumerate(reasons) if reason}
    bad = np.flatnonzero(np.isin(place, list(refused))) if refused else ()
    blank = np.asarray(pc.equal(coded.dictionary, ""))
    return values[place], blank[place], {int(position): reasons[place[position]] for position in bad}


def _all_plain(cells: pa.Array, decimal: str) -> NDArray[np.float64] | None:
    """The numbers of cells that are all plain or null, else None.

    The cast takes what `PLAIN` takes, and words for infinity and nan, which are sent the long way.
    """
    if decimal == ",":
        if pc.any(pc.match_substring(cells, ".")).as_py():
            return None
        cells = pc.replace_substring(cells, ",", ".")
    try:
        # A cast that fails goes on to the last cell, and words an error for each.
        cells[:A_FEW].cast(pa.float64())
        found = cells.cast(pa.float64())
    except pa.ArrowInvalid:
        return None
    if found.null_count < len(found) and not pc.all(pc.is_finite(found)).as_py():
        return None
    return np.asarray(pc.fill_null(found, np.nan))


def _texts(text: pa.Array, column: Column, writing: Writing) -> tuple[NDArray[np.float64], list[str]]:
    """Value of each text, and why it cannot be taken; trimmed texts, of which an empty one is blank."""
    power = power_of_ten(writing.unit, column.unit) if writing.unit else 0
    if power is None:
        raise ValueError(f"{column.name}: no power of ten from {writing.unit!r} to {column.unit!r}")
    pointed = text
    if writing.decimal == ",":
        pointed = pc.if_else(pc.match_substring(text, "."), "", pc.replace_substring(text, ",", "."))
    values = _with_unit(pointed, column, power)
    if column.letter_code in LETTERS and not power:
        values = np.where(np.isnan(values), _letter_code(pointed, LETTERS[column.letter_code]), values)
    if column.letter_code == "tolerance":
        values = np.where(np.isnan(values), _tolerance(pointed, column), values)
    unread = np.isnan(values) & ~np.asarray(pc.equal(text, ""))
    reasons = [""] * len(text)
    for place, reason in zip(
        np.flatnonzero(unread), _reasons(text.filter(pa.array(unread)), column, writing), strict=True
    ):
        reasons[place] = reason
    return values, reasons


def _with_unit(text: pa.Array, column: Column, power: int) -> NDArray[np.float64]:
    """Decimal text, alone or with a prefix or unit; `power` is that of a number that states none."""
    plain = pc.match_substring_regex(text, PLAIN)
    if not power and pc.all(plain).as_py():
        return np.asarray(text.cast(pa.float64()))
    fields = pc.extract_regex(text, WITH_UNIT)
    number, exponent, unit = (fields.field(index) for index in range(3))
    known = {"": power, **spelled(column.unit, bare=not power)}
    place = pc.index_in(pc.utf8_trim_whitespace(unit), pa.array(list(known), pa.string()))
    powers = pa.array(list(known.values()), pa.int64()).take(place)
    given = pc.if_else(pc.equal(exponent, ""), "0", exponent)
    total = pc.add(pc.if_else(pc.is_valid(fields), pc.utf8_ltrim(given, characters="+"), "0").cast(pa.int64()), powers)
    decimal = pc.binary_join_element_wise(number, "e", total.cast(pa.string()), "")
    decimal = pc.if_else(pc.is_valid(fields), decimal, None)
    if not power:
        # A plain exponent may have a digit more than one that meets a prefix.
        decimal = pc.if_else(plain, text, decimal)
    return _parsed(decimal)


def _letter_code(text: pa.Array, letters: Mapping[str, int]) -> NDArray[np.float64]:
    """4k7 -> 4.7e3, put together as decimal text so that it is rounded once."""
    has_digit = pc.match_substring_regex(text, "[0-9]")
    pattern = f"^(?P<whole>[0-9]*)(?P<letter>[{''.join(letters)}])(?P<part>[0-9]*)$"
    fields = pc.extract_regex(pc.if_else(has_digit, text, None), pattern)
    whole, letter, part = (fields.field(index) for index in range(3))
    place = pc.index_in(letter, pa.array(list(letters), pa.string()))
    power = pa.array([str(power) for power in letters.values()], pa.string()).take(place)
    padded = (pc.binary_join_element_wise("0", whole, ""), pc.binary_join_element_wise(part, "0", ""))
    decimal = pc.binary_join_element_wise(padded[0], ".", padded[1], "e", power, "")
    # `fields` is null where the pattern does not match, but its children need not be.
    return _parsed(pc.if_else(pc.is_valid(fields), decimal, None))


def _tolerance(text: pa.Array, column: Column) -> NDArray[np.float64]:
    """A tolerance by its letter, or with the sign for plus or minus before it."""
    place = pc.index_in(text, pa.array(list(TOLERANCES), pa.string()))
    by_letter = np.asarray(pc.fill_null(pa.array(list(TOLERANCES.values())).take(place), np.nan))
    signed = pc.replace_substring_regex(text, r"^(?:\x{b1}|\+/-|\+-)\s?([0-9.])", r"\1")
    return np.where(np.isnan(by_letter), _with_unit(signed, column, 0), by_letter)


def _parsed(decimal: pa.Array) -> NDArray[np.float64]:
    """Decimal text as numbers; nan where it is null."""
    return np.asarray(pc.fill_null(decimal.cast(pa.float64()), np.nan))


def _reasons(text: pa.Array, column: Column, writing: Writing) -> list[str]:
    """Why texts cannot be taken as numbers."""
    if not len(text):
        return []
    found = np.full(len(text), "", dtype=object)

    def say(where: pa.Array, reason: object) -> None:
        found[(found == "") & np.asarray(pc.fill_null(where, False))] = reason

    comma = pc.match_substring_regex(text, r"^[+-]?[0-9][0-9.,]*[a-zA-Z%\x{3a9}/ ]*$")
    if writing.decimal == ",":
        say(pc.and_(comma, pc.match_substring(text, ".")), _mark("point", "."))
    else:
        say(pc.and_(comma, pc.match_substring(text, ",")), _mark("comma", ","))
    for pattern, reason in CLUTTER:
        say(pc.match_substring_regex(text, pattern), reason)
    after = pc.extract_regex(text, WITH_UNIT).field(2)
    for unit, reason in misread(column.unit).items():
        say(pc.equal(after, unit), f"has {unit!r} after the number: {reason}; {_wanted(column)}")
    if writing.unit:
        say(
            pc.match_substring_regex(text, r"^[0-9.,]*\s?[RkKMGTpnum\x{b5}\x{3bc}][0-9]*$"),
            f"has a letter for its magnitude in a column that the job states in {writing.unit}; which counts?",
        )
    if notation(column.unit).symbols:
        named = pc.match_substring_regex(after, r"^(?:[A-Za-z%/\x{b0}\x{b5}\x{3a9}\x{2126}]{2,}|[%AFHV\x{3a9}])$")
        say(named, f"ends in a unit or word that the column does not take; {_wanted(column)}")
    say(pa.array(found == ""), f"is not a number; {_wanted(column)}")
    return [str(reason) for reason in found]


def _mark(name: str, mark: str) -> str:
    """Why a number with the other mark is refused."""
    said = f'say decimal = "{mark}" in the job'
    return f"has a {name}; if '{mark}' is the table's decimal sign, {said}, else write it without"


def _within(column: Column, values: NDArray[np.float64], blank: NDArray[np.bool_], refused: dict[int, str]) -> Numbers:
    """Numbers, of which those that the column does not allow are refused, too."""
    given = ~blank
    given[list(refused)] = False
    with np.errstate(invalid="ignore"):
        for bad, reason in _limits(column, values, np.abs(values)):
            for position in np.flatnonzero(bad & given):
                refused[int(position)] = reason
    values = np.where(blank, np.nan, values)
    values[list(refused)] = np.nan
    return Numbers(values, blank, dict(sorted(refused.items())))


def _limits(
    column: Column, values: NDArray[np.float64], size: NDArray[np.float64]
) -> list[tuple[NDArray[np.bool_], str]]:
    """Where numbers break a limit, and what to say; a later one counts."""
    found = [
        (np.isnan(values), "is nan, which is no number; leave the cell empty where nothing is known"),
        (np.isinf(values), "is infinite or too large"),
    ]
    finite = np.isfinite(values)
    beyond = ((size < SMALLEST) & (values != 0.0)) | (size > LARGEST)
    found.append((beyond & finite, f"is beyond all measure; wanted is 0 or {SMALLEST:g} to {LARGEST:g}"))
    if column.lowest:
        bound, allowed = column.lowest
        below = values < bound if allowed else values <= bound
        found.append((below & finite, f"must be {'at least' if allowed else 'above'} {bound:g}{_unit(column)}"))
    if column.highest:
        bound, allowed = column.highest
        above = values > bound if allowed else values >= bound
        found.append((above & finite, f"must be {'at most' if allowed else 'below'} {bound:g}{_unit(column)}"))
    if column.nonzero:
        found.append((values == 0.0, "must not be zero"))
    return found


def _unit(column: Column) -> str:
    return f" {column.unit}" if column.unit and column.unit != "gain" else ""


def _wanted(column: Column) -> str:
    examples = {
        "resistance": " or a code such as 4k7 or 10M",
        "capacitance": " or a code such as 2n2 or 100n",
        "tolerance": " or a tolerance letter such as F",
    }
    codes = examples.get(column.letter_code, "")
    unit = f" in {column.unit}" if column.unit and column.unit not in ("gain", "1") else ""
    return f"wanted is a plain number{unit}{codes}"
