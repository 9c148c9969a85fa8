"""The parts table: checked, as departures from an ideal op-amp in SI units, with the evidence for each."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from gainassay.contracts import tables
from gainassay.contracts.evidence import ASSUMED, GUARANTEED, MISSING, TYPICAL
from gainassay.contracts.quantities import Numbers
from gainassay.contracts.tables import Column
from gainassay.errors import InputError
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.departures import DEPARTURES, OPEN_LOOP_GAIN, Departure
from gainassay.job import Source, StandIn
from gainassay.tables import sources
from gainassay.tables.checks import Checking, ColumnUse, column_use, nothing_left, require_columns, unknown_columns
from gainassay.tables.rejects import Reject, rejected_rows


@dataclass(frozen=True)
class PartTable:
    """A checked parts table, ordered by name. Axis `departures` follows `DEPARTURES`.

    Attributes
    ----------
    rows : int
        Rows in the file, blank ones apart.
    names : ndarray of str, shape (parts,)
        Names.
    nominal : ndarray, shape (departures, parts)
        Each departure as the typical figure gives it, else the limit, else the job's stand-in, else 0.
    worst : ndarray, shape (departures, parts)
        Its upper bound in the worst case; the lower bound is 0.
    evidence : ndarray of uint8, shape (departures, parts)
        What `worst` rests on, a place in `EVIDENCE`. MISSING: nothing is known, and 0 stands there.
    modelled : tuple[bool, ...]
        Whether the table or the job says anything about the departure; if not, it is 0 everywhere and of
        evidence GUARANTEED, since nothing is claimed about it.
    columns : ColumnUse
        What became of the table's columns.
    """

    source: str
    sha256: str
    rows: int
    names: NDArray[np.str_]
    nominal: FloatArray
    worst: FloatArray
    evidence: NDArray[np.uint8]
    modelled: tuple[bool, ...]
    rejects: tuple[Reject, ...]
    columns: ColumnUse
    warnings: tuple[str, ...]

    def used(self) -> int:
        """Parts that can be screened."""
        return len(self.names)

    def rejected_rows(self) -> int:
        """Rows that were left out."""
        return rejected_rows(self.rejects)

    def not_modelled(self) -> tuple[str, ...]:
        """Quantities that the table says nothing about."""
        return tuple(d.quantity for d, there in zip(DEPARTURES, self.modelled, strict=True) if not there)


def load(source: Source, assume: Mapping[str, StandIn]) -> PartTable:
    """Read and check a parts table.

    Parameters
    ----------
    source : Source
        Where it lies.
    assume : Mapping[str, StandIn]
        What stands in for missing numbers, by data-sheet quantity.

    Raises
    ------
    InputError
        If the table cannot be read, lacks a column that every part needs, or holds no row that can be used.
    """
    known = {column.name: column for column in tables.columns("parts")}
    raw = sources.read(source, known)
    require_columns(raw, "parts")
    gain_columns = [name for name in known if name.startswith(OPEN_LOOP_GAIN.quantity)]
    if not set(gain_columns) & set(raw.columns):
        raise InputError(f"{raw.source}: the open-loop gain is missing; a column {' or '.join(gain_columns)} is needed")
    checking = Checking.of(raw)
    checking.names("part")
    read = [_departure(checking, departure, assume.get(departure.quantity, StandIn())) for departure in DEPARTURES]
    nominal, worst, evidence = (np.array(arrays) for arrays in zip(*(r[:3] for r in read), strict=True))

    order, names = checking.in_order()
    rows = len(raw.rows) + len(raw.ragged)
    if not len(order):
        raise InputError(nothing_left(raw.source, rows, checking.found(), "part"))
    return PartTable(
        source=raw.source,
        sha256=raw.sha256,
        rows=rows,
        names=names,
        nominal=np.take(nominal, order, axis=1),
        worst=np.take(worst, order, axis=1),
        evidence=np.take(evidence.astype(np.uint8), order, axis=1),
        modelled=tuple(r[3] for r in read),
        rejects=checking.found(),
        columns=column_use(raw, "parts", known),
        warnings=unknown_columns(raw, known),
    )


def _departure(
    checking: Checking, departure: Departure, stand_in: StandIn
) -> tuple[FloatArray, FloatArray, NDArray[np.int64], bool]:
    """Nominal, worst, evidence of one departure, each of shape (rows,), and whether it is modelled."""
    limit_column, typical_column = departure.limit_column, f"{departure.quantity}_typ"
    limit, limit_given = _figure(checking, limit_column)
    typical, typical_given = _figure(checking, typical_column)
    crossed = typical < limit if departure.reciprocal else typical > limit
    for position in np.flatnonzero(crossed):
        named = (
            f"{_filled_column(checking, limit_column, position)}, {_filled_column(checking, typical_column, position)}"
        )
        relation = "the minimum lies above" if departure.reciprocal else "the maximum lies below"
        checking.refuse(int(position), named, f"{relation} the typical figure")

    has_column = any(
        column.name in checking.raw.columns and column.name.startswith(f"{departure.quantity}_")
        for column in tables.columns("parts")
    )
    if not has_column and stand_in.value is None:
        nothing = np.zeros(len(limit))
        return nothing, nothing, np.full(len(limit), GUARANTEED), False
    assumed = np.nan if stand_in.value is None else stand_in.value
    figure = np.where(limit_given, limit, np.where(typical_given, typical * stand_in.typical_times, assumed))
    nominal = np.where(typical_given, typical, np.where(limit_given, limit, assumed))
    evidence = np.where(
        limit_given, GUARANTEED, np.where(typical_given, TYPICAL, MISSING if np.isnan(assumed) else ASSUMED)
    )
    missing = evidence == MISSING
    return (
        _as_departure(nominal, missing, departure),
        _as_departure(figure, missing, departure),
        evidence,
        True,
    )


def _as_departure(figure: FloatArray, missing: NDArray[np.bool_], departure: Departure) -> FloatArray:
    """The departure of a figure; what is missing is left out of the account, as 0."""
    known = np.where(missing | np.isnan(figure), np.inf if departure.reciprocal else 0.0, figure)
    return 1.0 / known if departure.reciprocal else known


def _figure(checking: Checking, name: str) -> tuple[FloatArray, NDArray[np.bool_]]:
    """A figure in its own unit, from its column or from the one that gives it in dB, and where it is given."""
    own = checking.column(tables.column("parts", name))
    values, given = own.values, ~own.blank
    for column in tables.columns("parts"):
        if column.in_place_of == name:
            other = checking.column(column)
            for position in np.flatnonzero(~own.blank & ~other.blank):
                checking.refuse(int(position), f"{name}, {column.name}", "both are given; give one of the two")
            values = np.where(given, values, _from_decibel(column, other))
            given = given | ~other.blank
    return values, given


def _from_decibel(column: Column, cells: Numbers) -> FloatArray:
    if column.unit != "dB":
        raise ValueError(f"{column.name}: no conversion from {column.unit!r}")
    coded = pa.array(cells.values).dictionary_encode()
    # One by one: an array's pow() may round differently by the place of a number in the array.
    ratios = np.array([10.0 ** (value / 20.0) for value in coded.dictionary.to_pylist()])
    return np.asarray(ratios[np.asarray(coded.indices)])


def _filled_column(checking: Checking, name: str, position: np.intp) -> str:
    """The column, of those that give a figure, in which a row gives it."""
    names = [name, *(column.name for column in tables.columns("parts") if column.in_place_of == name)]
    return next((n for n in names if checking.cell(n, int(position)).strip()), name)
