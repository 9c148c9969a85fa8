"""The stage table: checked, in SI units, one group of arrays for each topology."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts import tables
from gainassay.contracts.documents import nearest
from gainassay.contracts.moves import TEMPERATURE
from gainassay.contracts.quantities import Numbers, text_of
from gainassay.contracts.signals import Signals
from gainassay.errors import InputError
from gainassay.forms import coefficients
from gainassay.forms.cache import form_of
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.form import Form
from gainassay.forms.topology import Topology, driven_by_voltage
from gainassay.job import Source
from gainassay.tables import operating, signals, sources, spreads
from gainassay.tables.checks import Checking, ColumnUse, column_use, nothing_left, require_columns, unknown_columns
from gainassay.tables.compared import NOTHING, Cells, Compared, read_compared
from gainassay.tables.operating import Operating
from gainassay.tables.rejects import Reject, rejected_rows
from gainassay.tables.spreads import SpreadColumns, Spreads

BLANK = {
    ("resistor", "open"): np.inf,
    ("resistor", "short"): 0.0,
    ("capacitor", "open"): 0.0,
    ("capacitor", "short"): np.inf,
    ("inductor", "open"): np.inf,
    ("inductor", "short"): 0.0,
}
"""Value [ohm, F, H] that a blank element stands for."""

PER_PCT, PER_PPM = 1e-2, 1e-6


@dataclass(frozen=True)
class StageGroup:
    """The stages of one topology that work under the same conditions, ordered by name.

    Attributes
    ----------
    names : ndarray of str, shape (stages,)
        Names.
    values : ndarray, shape (elements, stages)
        Nominal values [ohm, F, H]; a blank one is 0 or inf. Order of the form's elements.
    spreads : Spreads
        How far the elements may lie from their nominal values.
    hot : bool
        Whether they work over a range of temperatures.
    calibrated : bool
        Whether their gain is trimmed at 25 degrees Celsius, so that only what moves afterwards counts.
    signals : Signals or None
        Of stages that do not work at 0 Hz.
    limits : ndarray, shape (stages,)
        Required accuracy as a fraction.
    targets : ndarray, shape (stages,)
        Target gain [gain unit]; nan where the ideal gain is the target.
    compared : Mapping[str, Cells]
        The columns that rules compare with the parts'.
    operating : Operating
        The columns that operating limits are checked from.
    """

    topology: Topology
    form: Form
    names: NDArray[np.str_]
    values: FloatArray
    spreads: Spreads
    hot: bool
    calibrated: bool
    signals: Signals | None
    limits: FloatArray
    targets: FloatArray
    compared: Mapping[str, Cells]
    operating: Operating


@dataclass(frozen=True)
class StageTable:
    """A checked stage table.

    Attributes
    ----------
    rows : int
        Rows in the file, blank ones apart.
    groups : tuple[StageGroup, ...]
        By name of the topology.
    columns : ColumnUse
        What became of the table's columns.
    """

    source: str
    sha256: str
    rows: int
    groups: tuple[StageGroup, ...]
    rejects: tuple[Reject, ...]
    columns: ColumnUse
    warnings: tuple[str, ...]

    def used(self) -> int:
        """Stages that can be screened."""
        return sum(len(group.names) for group in self.groups)

    def any_at_frequency(self) -> bool:
        """Whether a stage works at a frequency."""
        return any(group.signals is not None for group in self.groups)

    def rejected_rows(self) -> int:
        """Rows that were left out."""
        return rejected_rows(self.rejects)


def left_out(topology: Topology, values: FloatArray) -> dict[str, str]:
    """What a formula for some stages at 0 Hz may leave out: optional elements that none has, and reactive ones.

    Parameters
    ----------
    values : ndarray, shape (elements, stages)
        As in `StageGroup`.
    """
    absent = {
        element.name: element.absent
        for element, row in zip(topology.elements, values, strict=True)
        if element.absent != "error" and (row == row[0]).all() and (row[0] == 0.0 or np.isinf(row[0]))
    }
    return {**absent, **topology.at_dc()}


def kinds(library: Mapping[str, Topology]) -> dict[str, str]:
    """Kind of each element of any topology, by name."""
    return {element.name: element.kind for topology in library.values() for element in topology.elements}


def load(source: Source, library: Mapping[str, Topology], compared: Compared = NOTHING) -> StageTable:
    """Read and check a stage table.

    Parameters
    ----------
    compared : Compared
        What the job's rules compare with the parts.

    Raises
    ------
    InputError
        If the table cannot be read, lacks a column that every stage or a rule needs, names a topology that has no
        form, or holds no row that can be used.
    """
    kind_of = kinds(library)
    known = tables.stage_columns(kind_of) | compared.columns() | spreads.networks_named(source)
    raw = sources.read(source, known)
    require_columns(raw, "stages")
    if not {"accuracy_pct", "accuracy_ppm"} & set(raw.columns):
        raise InputError(
            f"{raw.source}: a column 'accuracy_pct' or 'accuracy_ppm' is missing: how accurate must a stage be?"
        )
    checking = Checking.of(raw)
    names = checking.names("stage").to_numpy(zero_copy_only=False)
    chosen = _topologies(checking, library)
    general = {
        name: checking.column(tables.column("stages", name)) for name in ("accuracy_pct", "accuracy_ppm", "target_gain")
    }
    limits = _limits(checking, general["accuracy_pct"], general["accuracy_ppm"])
    there = [name for name in sorted(kind_of) if name in raw.columns]
    values = {name: checking.column(tables.column("stages", f"<{kind_of[name]}>").of(name)) for name in there}
    moving = spreads.read(checking, sorted(kind_of))
    is_hot, is_calibrated = ~np.isnan(moving.excursion), _calibrated(checking)
    of_signals = signals.read(checking, is_calibrated)
    cells = read_compared(checking, compared)
    conditions = {**operating.read_stages(checking), "frequency_hz": of_signals.highest()}
    known |= moving.columns()

    groups = []
    for name in sorted(set(chosen) & set(library)):
        for tuned, calibrated, hot in product((False, True), repeat=3):
            same = (is_hot == hot) & (is_calibrated == calibrated) & (~np.isnan(of_signals.hertz[0]) == tuned)
            members = np.flatnonzero((chosen == name) & same)
            if not len(members):
                continue
            topology = library[name]
            nominal = _values(checking, topology, members, values)
            group = StageGroup(
                topology=topology,
                form=form_of(topology),
                names=names[members].astype(np.str_),
                values=nominal,
                spreads=spreads.of(moving, checking, topology, members, nominal),
                hot=hot,
                calibrated=calibrated,
                signals=of_signals.part(members) if tuned else None,
                limits=limits[members],
                targets=general["target_gain"].values[members],
                compared={column: found.at(members) for column, found in cells.items()},
                operating=operating.at(conditions, members),
            )
            _refuse_without_form(checking, group, members)
            _refuse_bias(checking, topology, members, conditions)
            kept = np.flatnonzero(checking.good()[members])
            if len(kept):
                groups.append(_ordered(group, kept[np.argsort(group.names[kept])]))
    rows = len(raw.rows) + len(raw.ragged)
    if not groups:
        raise InputError(nothing_left(raw.source, rows, checking.found(), "stage"))
    return StageTable(
        source=raw.source,
        sha256=raw.sha256,
        rows=rows,
        groups=tuple(groups),
        rejects=checking.found(),
        columns=column_use(raw, "stages", known),
        warnings=(*unknown_columns(raw, known), *_idle_coefficients(raw.source, moving, is_hot)),
    )


def _idle_coefficients(source: str, moving: SpreadColumns, is_hot: NDArray[np.bool_]) -> tuple[str, ...]:
    """A warning where temperature coefficients stand beside no temperatures."""
    cells = (moving.common[TEMPERATURE], *moving.own[TEMPERATURE].values())
    given = np.logical_or.reduce([~numbers.blank & (numbers.values > 0.0) for numbers in cells])
    count = int((given & ~is_hot).sum())
    if not count:
        return ()
    return (
        f"{source}: temperature coefficients without t_min_c and t_max_c, in {count:,} of its rows; these are taken at "
        "25 degrees Celsius, where they move nothing",
    )


def _calibrated(checking: Checking) -> NDArray[np.bool_]:
    if "calibrated" not in checking.raw.columns:
        return np.zeros(len(checking.raw.rows), dtype=bool)
    words = [word.lower() for word in text_of(checking.cells("calibrated")).to_pylist()]
    for position, word in enumerate(words):
        if word not in ("yes", "no", ""):
            checking.refuse(position, "calibrated", "is neither yes nor no; leave it blank for no")
    return np.array([word == "yes" for word in words], dtype=bool)


def _topologies(checking: Checking, library: Mapping[str, Topology]) -> NDArray[np.object_]:
    chosen = np.array(text_of(checking.cells("topology")).to_pylist(), dtype=object)
    for position, name in enumerate(chosen):
        if name == "":
            checking.refuse(position, "topology", "is blank; name the stage's topology")
        elif name not in library:
            hint = nearest(name, library) or "; `gainassay topologies` lists what there is"
            checking.refuse(position, "topology", f"is no topology that is known{hint}")
    return chosen


def _limits(checking: Checking, pct: Numbers, ppm: Numbers) -> FloatArray:
    """Required accuracy as a fraction."""
    columns = "accuracy_pct, accuracy_ppm"
    for position in np.flatnonzero(pct.blank & ppm.blank):
        checking.refuse(int(position), columns, "both are blank: how accurate must the stage be?")
    for position in np.flatnonzero(~pct.blank & ~ppm.blank):
        checking.refuse(int(position), columns, "both are given; give one of the two")
    return np.asarray(np.where(pct.blank, ppm.values * PER_PPM, pct.values * PER_PCT))


def _values(
    checking: Checking, topology: Topology, members: NDArray[np.intp], values: Mapping[str, Numbers]
) -> FloatArray:
    """Values of the topology's elements [ohm, F, H], shape (elements, members)."""
    own = {element.name for element in topology.elements}
    for name, cells in values.items():
        if name not in own:
            for position in members[~cells.blank[members]]:
                checking.refuse(
                    int(position), name, f"topology '{topology.name}' has no element {name}; empty the cell"
                )
    nominal = np.full((len(topology.elements), len(members)), np.nan)
    for index, element in enumerate(topology.elements):
        if element.name in values:
            blank = values[element.name].blank[members]
            nominal[index] = values[element.name].values[members]
        else:
            blank = np.ones(len(members), dtype=bool)
        if element.absent != "error":
            nominal[index, blank] = BLANK[element.kind, element.absent]
        else:
            for position in members[blank]:
                checking.refuse(
                    int(position),
                    element.name,
                    f"is blank, but topology '{topology.name}' needs {element.name}",
                )
    return nominal


def _refuse_without_form(checking: Checking, group: StageGroup, members: NDArray[np.intp]) -> None:
    """Reject stages whose values leave no ideal gain to correct."""
    form, good = group.form, checking.good()
    elements = ", ".join(name for name in form.elements if name in checking.raw.columns) or "topology"
    at_dc = coefficients.evaluate(form, coefficients.at_dc(form, group.values))
    positive = coefficients.is_feedback_positive(form, at_dc)
    found = [(at_dc, ["0 Hz"] * len(members))]
    if group.signals is not None:
        found = []
        for hertz in group.signals.hertz:
            own = np.where(np.isnan(hertz), group.signals.hertz[0], hertz)
            at = coefficients.evaluate(form, coefficients.at_frequency(form, group.values, own))
            found.append((at, [f"{f:g} Hz" for f in own.tolist()]))
    for at, where in found:
        finite: NDArray[np.bool_] = np.isfinite(np.concatenate([at.contrasts, at.loadings])).all(axis=0)
        for index in np.flatnonzero(good[members]).tolist():
            gain = at.gain_ideal[index]
            if gain == 0.0:
                reason = f"these values make the ideal gain at {where[index]} zero"
            elif not np.isfinite(gain):
                reason = f"these values make the ideal gain at {where[index]} infinite or undefined"
            elif not finite[index]:
                reason = "these values make the gain undefined; look for a 0 ohm across a source"
            elif positive[index]:
                reason = "these values make the feedback positive: the output would run to its limit"
            else:
                continue
            checking.refuse(int(members[index]), elements, reason)
        good = checking.good()


def _refuse_bias(checking: Checking, topology: Topology, members: NDArray[np.intp], conditions: Operating) -> None:
    """Reject stages that put a voltage at an input that a current drives."""
    if not driven_by_voltage(topology):
        for position in members[~np.isnan(conditions["v_in_dc"][members])]:
            reason = f"the input of topology '{topology.name}' is a current; empty the cell"
            checking.refuse(int(position), "v_in_dc", reason)


def _ordered(group: StageGroup, order: NDArray[np.intp]) -> StageGroup:
    return replace(
        group,
        names=group.names[order],
        values=group.values[:, order],
        spreads=group.spreads.of(order),
        signals=group.signals and group.signals.part(order),
        limits=group.limits[order],
        targets=group.targets[order],
        compared={column: cells.at(order) for column, cells in group.compared.items()},
        operating=operating.at(group.operating, order),
    )
