"""Cells of a table as numbers: plain decimal text or the letter code of IEC 60062, checked and never guessed."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from gainassay.contracts.tables import Column

SMALLEST, LARGEST = 1e-60, 1e60
"""Magnitudes beyond which nothing is measured, and products of a few numbers would overflow."""

PLAIN = r"^[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]{1,4})?$"
"""Decimal text. ASCII digits only: other parsers disagree on full-width digits, `1_000`, `0x10` and `1,5`."""

LETTERS = {
    "resistance": {"R": 0, "k": 3, "K": 3, "M": 6, "G": 9, "T": 12},
    "capacitance": {"p": -12, "n": -9, "u": -6, "\u00b5": -6, "\u03bc": -6, "m": -3, "F": 0},
}
"""Letters of each code and their powers of ten (IEC 60062). `m` is no resistance: milli or mega?"""


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


def text_of(cells: pa.Array) -> pa.Array:
    """Cells as text without surrounding white space; what is null becomes empty."""
    return pc.utf8_trim_whitespace(pc.fill_null(cells.cast(pa.string()), ""))


def numbers(cells: pa.Array, column: Column) -> Numbers:
    """The numbers in a column of text or of floating point or integer numbers.

    Parameters
    ----------
    cells : pyarrow.Array
        Strings, or numbers as a Parquet file holds them.
    column : Column
        What the column may hold: its bounds, and whether a letter code is understood.
    """
    if pa.types.is_floating(cells.type) or pa.types.is_integer(cells.type):
        blank = np.asarray(cells.is_null())
        values = np.asarray(pc.fill_null(cells.cast(pa.float64(), safe=False), np.nan))
        readable = ~blank
    else:
        text = text_of(cells)
        blank = np.asarray(pc.equal(text, ""))
        values = _plain(text)
        if column.letter_code:
            coded = _letter_code(text, LETTERS[column.letter_code])
            values = np.where(np.isnan(values), coded, values)
        readable = ~np.isnan(values)
    reason = np.full(len(blank), "", dtype=object)
    reason[~blank & ~readable] = _unreadable(column)
    reason[readable & np.isnan(values)] = "is nan, which is no number; leave the cell empty where nothing is known"
    reason[readable & np.isinf(values)] = "is infinite or too large"
    with np.errstate(invalid="ignore"):
        outside = (values != 0.0) & ((np.abs(values) < SMALLEST) | (np.abs(values) > LARGEST))
        reason[outside & np.isfinite(values)] = f"is beyond all measure; wanted is 0 or {SMALLEST:g} to {LARGEST:g}"
        if column.lowest:
            bound, allowed = column.lowest
            below = values < bound if allowed else values <= bound
            reason[below & np.isfinite(values)] = (
                f"must be {'at least' if allowed else 'above'} {bound:g}{_unit(column)}"
            )
        if column.highest:
            bound, allowed = column.highest
            above = values > bound if allowed else values >= bound
            reason[above & np.isfinite(values)] = (
                f"must be {'at most' if allowed else 'below'} {bound:g}{_unit(column)}"
            )
        if column.nonzero:
            reason[values == 0.0] = "must not be zero"
    refused = {int(row): str(reason[row]) for row in np.flatnonzero(reason != "")}
    return Numbers(np.where(reason == "", values, np.nan), blank, refused)


def _plain(text: pa.Array) -> NDArray[np.float64]:
    readable = pc.match_substring_regex(text, PLAIN)
    return np.asarray(pc.fill_null(pc.if_else(readable, text, None).cast(pa.float64()), np.nan))


def _letter_code(text: pa.Array, letters: Mapping[str, int]) -> NDArray[np.float64]:
    """4k7 -> 4.7e3, put together as decimal text so that it is rounded once."""
    has_digit = pc.match_substring_regex(text, "[0-9]")
    pattern = f"^(?P<whole>[0-9]*)(?P<letter>[{''.join(letters)}])(?P<part>[0-9]*)$"
    fields = pc.extract_regex(pc.if_else(has_digit, text, None), pattern)
    whole, letter, part = (fields.field(index) for index in range(3))
    power = letter
    for name, exponent in letters.items():
        power = pc.if_else(pc.equal(letter, name), str(exponent), power)
    decimal = pc.binary_join_element_wise(
        pc.binary_join_element_wise("0", whole, ""),
        ".",
        pc.binary_join_element_wise(part, "0", ""),
        "e",
        power,
        "",
    )
    # `fields` is null where the pattern does not match, but its children need not be.
    readable = pc.and_(pc.is_valid(fields), pc.is_valid(power))
    return np.asarray(pc.fill_null(pc.if_else(readable, decimal, None).cast(pa.float64()), np.nan))


def _unit(column: Column) -> str:
    return f" {column.unit}" if column.unit and column.unit != "gain" else ""


def _unreadable(column: Column) -> str:
    examples = {"resistance": " or a code such as 4k7 or 10M", "capacitance": " or a code such as 2n2 or 100n"}
    codes = examples.get(column.letter_code, "")
    unit = f" in {column.unit}" if column.unit and column.unit not in ("gain", "1") else ""
    return f"is not a number; wanted is a plain number{unit}{codes}"
