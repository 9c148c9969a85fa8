"""The parts table: checked, as departures from an ideal op-amp in SI units, with the evidence for each."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from gainassay.contracts import tables
from gainassay.contracts.evidence import ASSUMED, GUARANTEED, MISSING, TYPICAL
from gainassay.contracts.quantities import Numbers
from gainassay.contracts.tables import Column
from gainassay.errors import InputError
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.departures import BANDWIDTH, DEPARTURES, FIGURES, OPEN_LOOP_GAIN, Departure
from gainassay.job import Source, StandIn
from gainassay.tables import operating, sources
from gainassay.tables.checks import Checking, ColumnUse, column_use, nothing_left, require_columns, unknown_columns
from gainassay.tables.compared import NOTHING, Cells, Compared, read_compared
from gainassay.tables.operating import Operating
from gainassay.tables.order import gathered
from gainassay.tables.raw import RawTable
from gainassay.tables.rejects import Reject, rejected_rows

PER_PCT = 1e-2
SECOND_POLE, CMRR_CORNER = "f_second_pole_hz", "f_cmrr_hz"


@dataclass(frozen=True)
class PartTable:
    """A checked parts table, ordered by name. Axis `figures` follows `FIGURES`, which begin with `DEPARTURES`.

    Attributes
    ----------
    rows : int
        Rows in the file, blank ones apart.
    names : ndarray of str, shape (parts,)
        Names.
    nominal : ndarray, shape (figures, parts)
        Each departure as the typical figure gives it, else the limit, else the job's stand-in, else 0; and 0 where its
        sign is not known.
    worst : ndarray, shape (figures, parts)
        Its upper bound in the worst case; the lower bound is 0.
    evidence : ndarray of uint8, shape (figures, parts)
        What `worst` rests on, a place in `EVIDENCE`. MISSING: nothing is known, and 0 stands there.
    worst_hot, evidence_hot : ndarray, shape (figures, parts)
        The same for stages that work over a range of temperatures.
    change : ndarray, shape (figures, parts)
        How much the quantity, not the departure, may change after a calibration, up or down as a fraction; inf where
        nothing is known of it.
    evidence_change : ndarray of uint8, shape (figures, parts)
        What `change` rests on; GUARANTEED where nothing is known of it, since nothing is claimed.
    modelled : tuple[bool, ...]
        Whether the table or the job says anything about the figure; if not, it is 0 everywhere and of
        evidence GUARANTEED, since nothing is claimed about it. Without a gain-bandwidth product nothing holds at
        a frequency: that is always modelled.
    second_pole : ndarray, shape (parts,), or None
        Frequency of the second pole of the open-loop gain [Hz], nan where a cell is blank; none without such a column.
    cmrr_corner : ndarray, shape (parts,)
        Frequency above which the common-mode rejection falls [Hz], nan where none is given.
    compared : Mapping[str, Cells]
        The columns that rules compare with the stages'.
    operating : Operating
        The columns that operating limits are checked from.
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
    worst_hot: FloatArray
    evidence_hot: NDArray[np.uint8]
    change: FloatArray
    evidence_change: NDArray[np.uint8]
    modelled: tuple[bool, ...]
    second_pole: FloatArray | None
    cmrr_corner: FloatArray
    compared: Mapping[str, Cells]
    operating: Operating
    rejects: tuple[Reject, ...]
    columns: ColumnUse
    warnings: tuple[str, ...]

    def used(self) -> int:
        """Parts that can be screened."""
        return len(self.names)

    def rejected_rows(self) -> int:
        """Rows that were left out."""
        return rejected_rows(self.rejects)

    def not_modelled(self, at_frequency: bool) -> tuple[str, ...]:
        """Quantities that the table says nothing about, and that matter at 0 Hz or at a frequency."""
        known = zip(FIGURES, self.modelled, strict=True)
        return tuple(d.quantity for d, there in known if not there and (at_frequency or d in DEPARTURES))

    def lags(self) -> FloatArray:
        """1/f of the second pole and of where the common-mode rejection falls [1/Hz], 0 for none; shape (2, parts)."""
        poles = np.array(
            [self.second_pole if self.second_pole is not None else np.full(len(self.names), np.nan), self.cmrr_corner]
        )
        return np.where(np.isnan(poles), 0.0, 1.0 / poles)

    def gbw(self) -> FloatArray:
        """The nominal gain-bandwidth product [Hz]; nan where the table has none. Shape (parts,)."""
        place = FIGURES.index(BANDWIDTH)
        is_known = self.evidence[place] <= TYPICAL
        return np.where(is_known, 1.0 / np.where(is_known, self.nominal[place], 1.0), np.nan)


def load(source: Source, assume: Mapping[str, StandIn], compared: Compared = NOTHING) -> PartTable:
    """Read and check a parts table.

    Parameters
    ----------
    source : Source
        Where it lies.
    assume : Mapping[str, StandIn]
        What stands in for missing numbers, by data-sheet quantity.
    compared : Compared
        What the job's rules compare with the stages.

    Raises
    ------
    InputError
        If the table cannot be read, lacks a column that every part or a rule needs, or holds no row that can be used.
    """
    known = {column.name: column for column in tables.columns("parts")} | compared.columns()
    kept = {"part", *compared.columns()}
    checks: list[Checking] = []
    figures: list[list[_Read]] = []
    poles: list[FloatArray] = []
    cmrr_corners: list[FloatArray] = []
    limits: list[Operating] = []
    for block in sources.blocks(source, known):
        if not checks:
            _require(block)
        checking = Checking.of(block)
        figures.append([_departure(checking, one, assume.get(one.quantity, StandIn())) for one in FIGURES])
        poles.append(checking.column(tables.column("parts", SECOND_POLE)).values)
        cmrr_corners.append(checking.column(tables.column("parts", CMRR_CORNER)).values)
        limits.append(operating.read_parts(checking))
        # Its text is done with: a table may be larger than the memory.
        checks.append(checking.only(kept))
    checking = Checking.joined(checks)
    checking.names("part")
    cells = read_compared(checking, compared)
    order, names = checking.in_order()
    raw = checking.raw
    rows = len(raw.rows) + len(raw.ragged)
    if not len(order):
        raise InputError(nothing_left(raw.source, rows, checking.found(), "part"))
    worst, evidence = (_of_all(figures, name, order) for name in ("worst", "evidence"))
    return PartTable(
        source=raw.source,
        sha256=raw.sha256,
        rows=rows,
        names=names,
        nominal=_of_all(figures, "nominal", order),
        worst=worst,
        evidence=evidence,
        worst_hot=_hot(figures, "worst", order, worst),
        evidence_hot=_hot(figures, "evidence", order, evidence),
        change=_of_all(figures, "change", order),
        evidence_change=_of_all(figures, "evidence_change", order),
        modelled=tuple(one.modelled for one in figures[0]),
        second_pole=gathered(poles, order) if SECOND_POLE in raw.header else None,
        cmrr_corner=gathered(cmrr_corners, order),
        compared={name: column.at(order) for name, column in cells.items()},
        operating=operating.of_all(limits, order),
        rejects=checking.found(),
        columns=column_use(raw, "parts", known),
        warnings=unknown_columns(raw, known),
    )


def _require(raw: RawTable) -> None:
    """Raise if a column is missing that every part needs."""
    require_columns(raw, "parts")
    gain_columns = _figure_columns(OPEN_LOOP_GAIN)
    if not set(gain_columns) & set(raw.header):
        raise InputError(f"{raw.source}: the open-loop gain is missing; a column {' or '.join(gain_columns)} is needed")


def _of_all(blocks: list[list[_Read]], name: str, order: NDArray[np.intp]) -> NDArray[Any]:
    """What the blocks say of each figure, of all rows in order; what is the same in all rows takes no room."""
    each = ([getattr(one, name) for one in of_figure] for of_figure in zip(*blocks, strict=True))
    rows = [gathered(of_figure, order) for of_figure in each]
    if not any(row.strides[0] for row in rows):
        return np.broadcast_to(np.array([row[0] for row in rows])[:, None], (len(rows), len(order)))
    return np.stack(rows)


def _hot(blocks: list[list[_Read]], name: str, order: NDArray[np.intp], cold: NDArray[Any]) -> NDArray[Any]:
    """The same over temperature: that at 25 degrees Celsius itself where no block says otherwise."""
    same = all(getattr(one, f"{name}_hot") is getattr(one, name) for block in blocks for one in block)
    return cold if same else _of_all(blocks, f"{name}_hot", order)


def _everywhere(value: float | np.uint8, checking: Checking) -> NDArray[Any]:
    """One value in all rows, which takes no room."""
    return np.broadcast_to(value, len(checking.raw.rows))


def _figure_columns(departure: Departure) -> list[str]:
    """The columns that may give a departure's quantity."""
    return [
        column.name
        for column in tables.columns("parts")
        if column.name.startswith(f"{departure.quantity}_") and column.name != departure.change_column
    ]


@dataclass(frozen=True)
class _Read:
    """One figure of all rows, as `PartTable` has them; arrays of shape (rows,)."""

    nominal: FloatArray
    worst: FloatArray
    evidence: NDArray[np.uint8]
    worst_hot: FloatArray
    evidence_hot: NDArray[np.uint8]
    change: FloatArray
    evidence_change: NDArray[np.uint8]
    modelled: bool


def _departure(checking: Checking, departure: Departure, stand_in: StandIn) -> _Read:
    """Read one departure of all rows."""
    change, evidence_change = _change(checking, departure, stand_in)
    if stand_in.value is None and not set(_figure_columns(departure)) & set(checking.raw.header):
        # What the table has no column for is not modelled; but without a bandwidth nothing holds at a frequency.
        is_needed = departure is BANDWIDTH
        nothing = _everywhere(0.0, checking)
        certain = _everywhere(np.uint8(MISSING if is_needed else GUARANTEED), checking)
        return _Read(nothing, nothing, certain, nothing, certain, change, evidence_change, is_needed)
    limit_column, typical_column = departure.limit_column, f"{departure.quantity}_typ"
    limit, limit_given = _figure(checking, limit_column)
    typical, typical_given = _figure(checking, typical_column)
    hot, hot_given = _figure(checking, departure.hot_column)
    _refuse_crossed(checking, departure, limit_column, limit, typical_column, typical)
    _refuse_crossed(checking, departure, departure.hot_column, hot, typical_column, typical)
    assumed = np.nan if stand_in.value is None else stand_in.value
    figure = np.where(limit_given, limit, np.where(typical_given, typical * stand_in.typical_times, assumed))
    nominal = np.where(typical_given, typical, np.where(limit_given, limit, np.where(hot_given, hot, assumed)))
    evidence = np.where(
        limit_given, GUARANTEED, np.where(typical_given, TYPICAL, MISSING if np.isnan(assumed) else ASSUMED)
    )
    # A limit over temperature holds at 25 degrees Celsius too.
    only_hot = hot_given & ~limit_given
    figure, evidence = np.where(only_hot, hot, figure), np.where(only_hot, GUARANTEED, evidence)
    evidence = evidence.astype(np.uint8)
    worst = _as_departure(figure, evidence == MISSING, departure)
    nominal = _as_departure(nominal, np.isnan(nominal) | departure.is_signed, departure)
    if stand_in.hot_times == 1.0 and not hot_given.any():
        return _Read(nominal, worst, evidence, worst, evidence, change, evidence_change, True)
    over_temperature = np.where(hot_given, hot, figure * stand_in.hot_times)
    weaker = np.where(evidence == MISSING, MISSING, ASSUMED) if stand_in.hot_times != 1.0 else evidence
    return _Read(
        nominal=nominal,
        worst=worst,
        evidence=evidence,
        worst_hot=np.maximum(worst, _as_departure(over_temperature, evidence == MISSING, departure)),
        evidence_hot=np.where(hot_given, GUARANTEED, weaker).astype(np.uint8),
        change=change,
        evidence_change=evidence_change,
        modelled=True,
    )


def _refuse_crossed(
    checking: Checking, departure: Departure, limit_column: str, limit: FloatArray, column: str, typical: FloatArray
) -> None:
    crossed = typical < limit if departure.reciprocal else typical > limit
    relation = "the minimum lies above" if departure.reciprocal else "the maximum lies below"
    for limits, is_limit in _givers(checking, limit_column):
        for figures, is_figure in _givers(checking, column):
            where = crossed & is_limit & is_figure
            checking.refuse_where(where, f"{limits}, {figures}", f"{relation} the typical figure")


def _change(checking: Checking, departure: Departure, stand_in: StandIn) -> tuple[FloatArray, NDArray[np.uint8]]:
    """Change after a calibration as a fraction, and what it rests on; calibrated stages work at 0 Hz."""
    if departure not in DEPARTURES or (
        stand_in.change_pct is None and departure.change_column not in checking.raw.header
    ):
        return _everywhere(np.inf, checking), _everywhere(np.uint8(GUARANTEED), checking)
    cells = checking.column(tables.column("parts", departure.change_column))
    assumed = np.inf if stand_in.change_pct is None else stand_in.change_pct * PER_PCT
    evidence = np.where(cells.blank & np.isfinite(assumed), ASSUMED, GUARANTEED)
    return np.where(cells.blank, assumed, cells.values * PER_PCT), evidence.astype(np.uint8)


def _as_departure(figure: FloatArray, missing: NDArray[np.bool_], departure: Departure) -> FloatArray:
    """The departure of a figure; what is missing is left out of the account, as 0."""
    return departure.of(np.where(missing | np.isnan(figure), np.inf if departure.reciprocal else 0.0, figure))


def _figure(checking: Checking, name: str) -> tuple[FloatArray, NDArray[np.bool_]]:
    """A figure in its own unit, from its column or from the one that gives it in dB, and where it is given."""
    own = checking.column(tables.column("parts", name))
    values, given = own.values, ~own.blank
    for column in tables.columns("parts"):
        if column.in_place_of == name:
            other = checking.column(column)
            both = ~own.blank & ~other.blank
            checking.refuse_where(both, f"{name}, {column.name}", "both are given; give one of the two")
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


def _givers(checking: Checking, name: str) -> Iterator[tuple[str, NDArray[np.bool_]]]:
    """The columns that may give a figure, and where each does, being the first that is filled."""
    left = np.ones(len(checking.raw.rows), dtype=bool)
    for column in tables.columns("parts"):
        if name in (column.name, column.in_place_of):
            blank = checking.column(column).blank
            yield column.name, left & ~blank
            left &= blank
