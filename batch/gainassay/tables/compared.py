"""The columns of the two tables that the job's `[[eligible]]` rules compare, whether or not a schema knows them."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts import tables
from gainassay.contracts.documents import nearest
from gainassay.contracts.quantities import numbers, text_of
from gainassay.contracts.tables import Column
from gainassay.errors import InputError
from gainassay.forms.coefficients import FloatArray
from gainassay.job import Eligible
from gainassay.tables.checks import Checking
from gainassay.tables.raw import is_number


@dataclass(frozen=True)
class Compared:
    """What the rules compare of one table.

    Attributes
    ----------
    numbers : tuple[Column, ...]
        Columns whose cells must be numbers.
    words : tuple[Column, ...]
        Columns that are only asked to be equal: a cell is a number where it can be read as one, else text.
    ranges : tuple[tuple[str, str], ...]
        Columns that are the low and the high end of a range.
    """

    numbers: tuple[Column, ...] = ()
    words: tuple[Column, ...] = ()
    ranges: tuple[tuple[str, str], ...] = ()

    def columns(self) -> dict[str, Column]:
        """All columns, by name."""
        return {column.name: column for column in (*self.numbers, *self.words)}


NOTHING = Compared()
"""What is compared where there are no rules."""


@dataclass(frozen=True)
class Cells:
    """A column that rules compare.

    Attributes
    ----------
    text : ndarray of str, shape (rows,)
        What stands in each cell, trimmed; empty where it is blank.
    values : ndarray, shape (rows,)
        The numbers; nan where a cell is none.
    """

    text: NDArray[np.object_]
    values: FloatArray

    def at(self, rows: NDArray[np.intp]) -> Cells:
        """Some of the rows."""
        return Cells(self.text[rows], self.values[rows])

    def blank(self) -> NDArray[np.bool_]:
        """Where nothing stands."""
        return np.asarray(self.text == "", dtype=bool)


def compared(rules: Sequence[Eligible], kinds: Mapping[str, str]) -> tuple[Compared, Compared]:
    """What the rules compare of the stage table and of the part table.

    A column that no schema knows is written in the unit of the column that it is compared with.

    Parameters
    ----------
    kinds : Mapping[str, str]
        Kind of each element of any topology, by name.
    """
    of_stages, of_parts = tables.stage_columns(kinds), {column.name: column for column in tables.columns("parts")}
    comparisons = [comparison for rule in rules for comparison in rule.comparisons()]
    stages = [(one.stage, one.part, one.relation) for one in comparisons]
    parts = [(one.part, one.stage, one.relation) for one in comparisons]
    return (
        _compared(stages, [rule.stage for rule in rules], of_stages, of_parts),
        _compared(parts, [rule.part for rule in rules], of_parts, of_stages),
    )


def _compared(
    comparisons: Sequence[tuple[str, str, str]],
    given: Sequence[tuple[str, ...]],
    own: Mapping[str, Column],
    others: Mapping[str, Column],
) -> Compared:
    """What is compared of one table: `comparisons` hold its column, the other table's and their relation."""
    ordered = {name for name, _, relation in comparisons if relation != "equals"}
    # The first of several counts.
    like = {name: others[other] for name, other, _ in reversed(comparisons) if other in others and others[other].unit}
    columns = [
        own.get(name) or tables.undescribed(name, like.get(name))
        for name in dict.fromkeys(name for name, _, _ in comparisons)
    ]
    return Compared(
        numbers=tuple(column for column in columns if column.name in ordered),
        words=tuple(column for column in columns if column.name not in ordered),
        ranges=tuple(dict.fromkeys((ends[0], ends[1]) for ends in given if len(ends) > 1)),
    )


def read_compared(checking: Checking, compared: Compared) -> dict[str, Cells]:
    """The compared columns of a table by name, their bad cells and ranges that end before they begin rejected.

    Raises
    ------
    InputError
        If the table lacks one.
    """
    _require(checking, compared.columns())
    found = {column.name: _cells(checking, column, is_word=False) for column in compared.numbers}
    found |= {column.name: _cells(checking, column, is_word=True) for column in compared.words}
    for low, high in compared.ranges:
        crossed = (found[low].values > found[high].values) & checking.good()
        checking.refuse_where(crossed, f"{low}, {high}", "the low end of the range lies above its high end")
    return found


def _cells(checking: Checking, column: Column, is_word: bool) -> Cells:
    cells = checking.cells(column.name)
    # Where the file itself holds numbers, what is none, such as nan, is no word either.
    read = numbers(cells, column) if is_word and not is_number(cells) else checking.column(column)
    return Cells(np.array(text_of(cells).to_pylist(), dtype=object), read.values)


def _require(checking: Checking, names: Iterable[str]) -> None:
    there = checking.raw.header
    for name in names:
        if name not in there:
            raise InputError(
                f"{checking.raw.source}: the column '{name}' is missing, which a rule of [[eligible]] compares"
                f"{nearest(name, there)}"
            )
