"""What the stage table says of how far elements may lie from their nominal values, and which of them track."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts import tables
from gainassay.contracts.moves import MOVES, TEMPERATURE
from gainassay.contracts.quantities import Numbers, text_of
from gainassay.contracts.tables import Column
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.topology import Topology
from gainassay.job import Source
from gainassay.tables.checks import Checking

SPREAD_COLUMNS = (("tol_pct", 1e-2), ("tc_ppm_k", 1e-6), ("drift_pct", 1e-2))
"""For each of `MOVES` the column of all resistors, and its unit; `<element>_` before it makes one element's column."""

RATIO_COLUMNS = (("ratio_tol_pct", 1e-2), ("ratio_tc_ppm_k", 1e-6))
"""For the first of `MOVES`, with `<network>_` before it, the column that says how well a network's resistors track."""

NO_NETWORK = "none"
"""In place of a network's name: an element that belongs to none although the others do."""

CALIBRATION_C = 25.0
"""Temperature [degree Celsius] at which nominal values and tolerances hold, and at which a stage is calibrated."""


@dataclass(frozen=True)
class Spreads:
    """How far the elements of some stages may lie from their nominal values.

    Attributes
    ----------
    own : ndarray, shape (moves, elements, stages)
        Up or down, as a fraction.
    network : ndarray of int, shape (elements, stages)
        Which network an element belongs to, -1 for none.
    ratios : ndarray, shape (moves, networks, stages)
        How far the ratio of two of its members may be off, as a fraction; nan where they do not track.
    """

    own: FloatArray
    network: NDArray[np.int8]
    ratios: FloatArray

    def of(self, stages: NDArray[np.intp]) -> Spreads:
        """Some of the stages."""
        return Spreads(self.own[:, :, stages], self.network[:, stages], self.ratios[:, :, stages])


@dataclass(frozen=True)
class SpreadColumns:
    """The columns of a stage table that say so, read and checked.

    Attributes
    ----------
    common : tuple[Numbers, ...]
        For each of `MOVES`, of all resistors.
    own : tuple[Mapping[str, Numbers], ...]
        For each of `MOVES`, of the elements that have a column of their own.
    excursion : ndarray, shape (rows,)
        How far the temperature may be from 25 degrees Celsius [K]; nan where the stage has no range.
    network : ndarray of str, shape (rows,)
        Network of all resistors.
    networks : Mapping[str, NDArray]
        Network of the elements that have a column of their own.
    ratios : Mapping[str, tuple[Numbers, ...]]
        Of each network, for the moves of `RATIO_COLUMNS`.
    """

    common: tuple[Numbers, ...]
    own: tuple[Mapping[str, Numbers], ...]
    excursion: FloatArray
    network: NDArray[np.object_]
    networks: Mapping[str, NDArray[np.object_]]
    ratios: Mapping[str, tuple[Numbers, ...]]

    def columns(self) -> dict[str, Column]:
        """The columns of its networks, by name."""
        found = [_of_network(name, column) for name in self.ratios for column, _ in RATIO_COLUMNS]
        return {column.name: column for column in found}


def networks_named(source: Source) -> dict[str, Column]:
    """The columns of networks that a job maps, by name."""
    suffixes = [f"_{column}" for column, _ in RATIO_COLUMNS]
    names = [(heading.ours, suffix) for heading in source.columns for suffix in suffixes]
    found = [(name.removesuffix(suffix), suffix[1:]) for name, suffix in names if name.endswith(suffix)]
    return {column.name: column for column in (_of_network(network, column) for network, column in found)}


def _of_network(network: str, column: str) -> Column:
    return tables.column("stages", f"{tables.NETWORK}_{column}").of(network)


def read(checking: Checking, elements: Iterable[str]) -> SpreadColumns:
    """The columns of a stage table that say how far elements may lie from their nominal values."""
    elements = tuple(elements)
    columns = checking.raw.columns
    own = tuple(
        {
            name: checking.column(tables.column("stages", f"{tables.ELEMENT}_{column}").of(name))
            for name in elements
            if f"{name}_{column}" in columns
        }
        for column, _ in SPREAD_COLUMNS
    )
    network = _text(checking, "network")
    networks = {name: _text(checking, f"{name}_network") for name in elements if f"{name}_network" in columns}
    named = {name for cells in (network, *networks.values()) for name in cells.tolist()} - {"", NO_NETWORK}
    return SpreadColumns(
        common=tuple(checking.column(tables.column("stages", column)) for column, _ in SPREAD_COLUMNS),
        own=own,
        excursion=_excursion(checking),
        network=network,
        networks=networks,
        ratios={
            name: tuple(checking.column(_of_network(name, column)) for column, _ in RATIO_COLUMNS)
            for name in sorted(named)
        },
    )


def _text(checking: Checking, column: str) -> NDArray[np.object_]:
    if column not in checking.raw.columns:
        return np.full(len(checking.raw.rows), "", dtype=object)
    return np.array(text_of(checking.cells(column)).to_pylist(), dtype=object)


def _excursion(checking: Checking) -> FloatArray:
    low, high = (checking.column(tables.column("stages", name)) for name in ("t_min_c", "t_max_c"))
    for position in np.flatnonzero(low.blank != high.blank):
        checking.refuse(int(position), "t_min_c, t_max_c", "one of the two is blank; a temperature range needs both")
    for position in np.flatnonzero(low.values > high.values):
        checking.refuse(int(position), "t_min_c, t_max_c", "the lower end lies above the upper end")
    return np.asarray(np.maximum(np.abs(low.values - CALIBRATION_C), np.abs(high.values - CALIBRATION_C)))


def of(
    columns: SpreadColumns, checking: Checking, topology: Topology, members: NDArray[np.intp], nominal: FloatArray
) -> Spreads:
    """The spreads of some rows, all of one topology.

    Parameters
    ----------
    members : ndarray of int, shape (stages,)
        Places of the rows.
    nominal : ndarray, shape (elements, stages)
        Nominal values [ohm, F, H]. What is open or short has no spread and belongs to no network.
    """
    present = np.isfinite(nominal) & (nominal > 0.0)
    own = np.zeros((len(MOVES), *nominal.shape))
    for move, (_, unit) in enumerate(SPREAD_COLUMNS):
        _refuse_strangers(checking, topology, members, SPREAD_COLUMNS[move][0], columns.own[move])
        for index, element in enumerate(topology.elements):
            cells = columns.own[move].get(element.name)
            shared = np.where(columns.common[move].blank, 0.0, columns.common[move].values)[members]
            found = shared if element.kind == "resistor" else np.zeros(len(members))
            if cells is not None:
                found = np.where(cells.blank[members], found, cells.values[members])
            own[move, index] = np.where(present[index], found * unit, 0.0)
    # Without a range of temperatures a coefficient moves nothing.
    own[TEMPERATURE] *= np.nan_to_num(columns.excursion[members])
    for index, place in zip(*np.nonzero(own[TEMPERATURE] >= 1.0), strict=True):
        reason = "over this range of temperatures the value may change by 100 % and more"
        checking.refuse(int(members[place]), _column_of(checking, topology.elements[index].name, TEMPERATURE), reason)
    network, ratios = _networks(columns, checking, topology, members, present, own)
    return Spreads(own, network, ratios)


def _refuse_strangers(
    checking: Checking, topology: Topology, members: NDArray[np.intp], column: str, cells: Mapping[str, Numbers]
) -> None:
    own = {element.name for element in topology.elements}
    for name, numbers in cells.items():
        if name not in own:
            for position in members[~numbers.blank[members]]:
                reason = f"topology '{topology.name}' has no element {name}; empty the cell"
                checking.refuse(int(position), f"{name}_{column}", reason)


def _column_of(checking: Checking, element: str, move: int) -> str:
    """The column that a spread comes from."""
    column = SPREAD_COLUMNS[move][0]
    return f"{element}_{column}" if f"{element}_{column}" in checking.raw.columns else column


def _networks(
    columns: SpreadColumns,
    checking: Checking,
    topology: Topology,
    members: NDArray[np.intp],
    present: NDArray[np.bool_],
    own: FloatArray,
) -> tuple[NDArray[np.int8], FloatArray]:
    """Network of each element, and the ratios of each network, of some rows."""
    network = np.full(present.shape, -1, np.int8)
    if not columns.ratios:
        return network, np.full((len(MOVES), 0, len(members)), np.nan)
    named = np.full(present.shape, "", dtype=object)
    for index, element in enumerate(topology.elements):
        if element.kind == "resistor":
            cells = columns.networks.get(element.name, np.full(len(columns.network), "", dtype=object))[members]
            named[index] = np.where(cells == "", columns.network[members], cells)
    named[~present] = ""
    ratios = np.full((len(MOVES), _most_networks(named), len(members)), np.nan)
    for place in np.flatnonzero((named != "").any(axis=0)):
        row, chosen = int(members[place]), named[:, place].tolist()
        for slot, name in enumerate(_networks_in(chosen)):
            found = [index for index, of in enumerate(chosen) if of == name]
            network[found, place] = slot
            for move, (_, unit) in enumerate(RATIO_COLUMNS):
                ratios[move, slot, place] = columns.ratios[name][move].values[row] * unit
            # The ratio of temperature coefficients counts over the same temperatures as these.
            ratios[TEMPERATURE, slot, place] *= np.nan_to_num(columns.excursion[row])
            if len(found) > 1:
                _refuse_doubtful(
                    columns, checking, row, name, [topology.elements[i].name for i in found], own[:, found, place]
                )
    return network, ratios


def _networks_in(chosen: Sequence[str]) -> list[str]:
    return [name for name in dict.fromkeys(chosen) if name not in ("", NO_NETWORK)]


def _most_networks(named: NDArray[np.object_]) -> int:
    return max((len(_networks_in(column)) for column in named.T.tolist()), default=0)


def _refuse_doubtful(
    columns: SpreadColumns, checking: Checking, row: int, name: str, elements: Sequence[str], own: FloatArray
) -> None:
    """Reject a row whose network leaves open how its members move."""
    if all(numbers.blank[row] for numbers in columns.ratios[name]):
        needed = " or ".join(f"{name}_{column}" for column, _ in RATIO_COLUMNS)
        checking.refuse(row, "network", f"nothing says how well the resistors of network '{name}' track; fill {needed}")
    for move, (column, _) in enumerate(RATIO_COLUMNS):
        if columns.ratios[name][move].blank[row]:
            continue
        spread = SPREAD_COLUMNS[move][0]
        if own[move].min() != own[move].max():
            reason = f"{', '.join(elements)} of network '{name}' differ in {spread}; those that track have one"
            checking.refuse(row, f"{name}_{column}", reason)
        elif columns.common[move].blank[row] and not any(
            not columns.own[move][element].blank[row] for element in elements if element in columns.own[move]
        ):
            checking.refuse(row, f"{name}_{column}", f"a ratio needs absolute values beside it; fill {spread}")
