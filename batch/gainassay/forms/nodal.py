"""From a topology to its gain N/D, exactly: the nodal equations and their determinants.

Unknowns are the voltages of the nodes that no source holds, and the output current i_o of each amplifier.
Every node but ground has the row of Kirchhoff's current law; each amplifier adds the row

    (v+ - v-) + (v+ + v-) c/2 - a v_out - a r_o i_o = 0,    a = 1/A_OL,

which stays finite as A_OL goes to infinity. An element enters by its admittance y, the input resistance by
g_id = 1/r_id, the common-mode resistances from both inputs to ground by g_icp and g_icn. c = 1/CMRR may have either
sign and is c_pos - c_neg. Every symbol has rank one in the matrix, so N and D are multi-affine in all of them.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import partial
from typing import Self

from gainassay.errors import InputError
from gainassay.forms.departures import BASIC, Departure
from gainassay.forms.multiaffine import MultiAffine, TooLargeError, determinant
from gainassay.forms.topology import GROUND, Topology, driven_by_voltage, output_is_current

MOST_PRODUCTS = 10_000
"""Products of symbols in a determinant; beyond, forms take minutes to find and nobody can read them."""

RIGHT_HAND_SIDE = -1
"""Column of the sources in the rows of the nodal system."""


@dataclass(frozen=True)
class NetworkFunction:
    """A network function of a topology as a ratio of multi-affine polynomials.

    Attributes
    ----------
    elements : tuple[str, ...]
        Elements; the symbol numbered i is the admittance of `elements[i]`.
    departures : tuple[tuple[str, str], ...]
        (amplifier, departure); their symbols follow those of the elements.
    numerator, denominator : MultiAffine
        The network function is numerator / denominator.
    """

    elements: tuple[str, ...]
    departures: tuple[tuple[str, str], ...]
    numerator: MultiAffine
    denominator: MultiAffine

    def departure_mask(self) -> int:
        """Mask of the departures' symbols."""
        return ((1 << len(self.departures)) - 1) << len(self.elements)

    def without(self, states: Mapping[str | tuple[str, str], str]) -> Self:
        """The function of the network in which elements are `open` or `short`, or departures `ideal`.

        An open element has admittance 0 and an ideal departure is 0; for a short element, admittance infinite,
        the leading coefficients stay. Where both polynomials vanish, both are divided by the symbol first.
        """
        numerator, denominator = self.numerator, self.denominator
        names: list[str | tuple[str, str]] = [*self.elements, *self.departures]
        for name, state in states.items():
            bit = 1 << names.index(name)
            rests, leads = zip(numerator.split(bit), denominator.split(bit), strict=True)
            kept, other = (leads, rests) if state == "short" else (rests, leads)
            numerator, denominator = kept if any(kept) else other
        return replace(self, numerator=numerator, denominator=denominator)


class Gain(NetworkFunction):
    """The gain of a topology."""


class Impedance(NetworkFunction):
    """The driving-point impedance of a topology between two of its nodes."""


def derive(topology: Topology, departures: Sequence[Departure] = BASIC) -> Gain:
    """The gain of a topology.

    Parameters
    ----------
    departures : sequence of Departure
        Those that its amplifiers have.

    Raises
    ------
    InputError
        If the nodal equations have no unique solution even with a real amplifier.
    """
    system = _driven(topology, departures=departures)
    # A balanced pair of voltages is +1 and -1 in place of +1/2 and -1/2, so that coefficients stay integers.
    scale = len(topology.input) if driven_by_voltage(topology) else 1
    numerator = system.output_voltage()
    if output_is_current(topology):
        # The voltage across an element depends on its admittance in the denominator alone (Thevenin), so the
        # current y (v1 - v2) is multi-affine again.
        numerator = system.names.symbol(topology.output).times(numerator)
    names = system.names
    return Gain(names.elements, names.departures, numerator, system.whole.times(MultiAffine.constant(scale)))


@dataclass(frozen=True)
class Operation:
    """What a topology's amplifiers do while they are ideal, as polynomials in the elements' admittances.

    Attributes
    ----------
    whole : MultiAffine
        The denominator of all others.
    output : MultiAffine
        The stage's output voltage, that across the element where the output is a current.
    v_out, i_out, v_in : tuple[MultiAffine, ...]
        Of each amplifier the output voltage, the current out of the output, and the voltage of both inputs.
    """

    whole: MultiAffine
    output: MultiAffine
    v_out: tuple[MultiAffine, ...]
    i_out: tuple[MultiAffine, ...]
    v_in: tuple[MultiAffine, ...]


def operation(topology: Topology, common: bool = False) -> Operation:
    """What the amplifiers of a topology do while they are ideal.

    Parameters
    ----------
    common : bool
        Whether 1 V stands at every node of the input, in place of the signal.
    """
    system = _driven(topology, dict.fromkeys(topology.input, 1) if common else None, is_ideal=True)
    places = range(len(topology.amplifiers))
    return Operation(
        whole=system.whole,
        output=system.output_voltage(),
        v_out=tuple(system.voltage(amplifier.out) for amplifier in topology.amplifiers),
        i_out=tuple(system.solved(len(topology.nodes()) + place) for place in places),
        v_in=tuple(system.voltage(amplifier.plus) for amplifier in topology.amplifiers),
    )


def feedback(topology: Topology) -> tuple[tuple[tuple[MultiAffine, ...], ...], MultiAffine]:
    """What each amplifier's output brings back to each amplifier's inputs, v- less v+, through the elements alone.

    Returns
    -------
    tuple
        Numerators by receiving, then by sending amplifier, and their denominator.
    """
    passive = replace(topology, amplifiers=())
    dead = dict.fromkeys((GROUND, *(topology.input if driven_by_voltage(topology) else ())), 0)
    outputs = [amplifier.out for amplifier in topology.amplifiers]
    systems = [
        _System.of(passive, dead | {output: int(output == sending) for output in outputs}, {}) for sending in outputs
    ]
    brought = tuple(
        tuple(system.voltage(amplifier.minus) - system.voltage(amplifier.plus) for system in systems)
        for amplifier in topology.amplifiers
    )
    return brought, systems[0].whole


def _driven(
    topology: Topology,
    drive: Mapping[str, int] | None = None,
    is_ideal: bool = False,
    departures: Sequence[Departure] = BASIC,
) -> _System:
    """The equations of a topology with its input driven, by the signal if nothing else is said.

    Raises
    ------
    InputError
        If they have no unique solution even with a real amplifier.
    """
    held = driven_by_voltage(topology)
    drive = dict(zip(topology.input, (1, -1), strict=False)) if drive is None else drive
    system = _System.of(topology, {GROUND: 0, **(drive if held else {})}, {} if held else drive, is_ideal, departures)
    if not system.whole:
        raise InputError(
            f"{topology.where()}: its nodal equations have no unique solution; "
            "look for a node that nothing holds, or an amplifier without feedback"
        )
    return system


@dataclass(frozen=True)
class _System:
    """Nodal equations and their determinant `whole`, over which all unknowns are solved for (Cramer's rule)."""

    topology: Topology
    names: _Names
    potential: Mapping[str, int]
    rows: list[dict[int, MultiAffine]]
    columns: list[int]
    whole: MultiAffine

    @staticmethod
    def of(
        topology: Topology,
        potential: Mapping[str, int],
        injected: Mapping[str, int],
        is_ideal: bool = False,
        departures: Sequence[Departure] = BASIC,
    ) -> _System:
        names = _Names.of(topology, departures)
        rows, columns = _equations(topology, names, potential, injected)
        if is_ideal:
            elements = (1 << len(names.elements)) - 1
            rows = [{column: entry.within(elements) for column, entry in row.items()} for row in rows]
        return _System(topology, names, potential, rows, columns, _determinant(topology, rows, columns))

    def solved(self, column: int) -> MultiAffine:
        """Numerator of the unknown of a column."""
        return _determinant(self.topology, self.rows, [RIGHT_HAND_SIDE if c == column else c for c in self.columns])

    def voltage(self, node: str) -> MultiAffine:
        """Numerator of a node's voltage."""
        if node in self.potential:
            return self.whole.times(MultiAffine.constant(self.potential[node]))
        return self.solved(self.topology.nodes().index(node))

    def output_voltage(self) -> MultiAffine:
        """Numerator of the output voltage, that across the element where the output is a current."""
        if not output_is_current(self.topology):
            return self.voltage(self.topology.output)
        first, second = self.topology.element(self.topology.output).between
        return self.voltage(first) - self.voltage(second)


def _determinant(topology: Topology, rows: list[dict[int, MultiAffine]], columns: list[int]) -> MultiAffine:
    """The determinant, if it is of a size that can be worked with.

    Raises
    ------
    InputError
        If it has more products than `MOST_PRODUCTS`.
    """
    try:
        found = determinant(rows, columns)
    except TooLargeError:
        found = None
    if found is None or len(found.terms) > MOST_PRODUCTS:
        raise InputError(
            f"{topology.where()}: its elements are meshed too densely: the determinant of its nodal equations has more "
            f"than {MOST_PRODUCTS:,} products; split the network into stages, or leave columns of r_icm and cmrr out"
        )
    return found


def input_impedance(topology: Topology) -> Impedance:
    """The impedance that the source sees at the input, between the nodes if it is a balanced pair.

    A polynomial of the impedance is zero where the impedance is zero or infinite whatever the amplifiers.
    """
    first, second = (*topology.input, GROUND)[:2]
    return _driving_point(topology, {GROUND: 0}, first, second)


def input_impedance_at(topology: Topology, node: str) -> Impedance:
    """The impedance between one node of an input pair and ground, the source of the other node dead."""
    others = [other for other in topology.input if other != node] if driven_by_voltage(topology) else []
    return _driving_point(topology, dict.fromkeys((GROUND, *others), 0), node, GROUND)


def output_impedance(topology: Topology) -> Impedance:
    """The impedance that a load sees at the output, the source dead.

    Between the output node and ground; where the output is the current through an element, between that
    element's nodes with the element taken away.
    """
    dead = dict.fromkeys((GROUND, *(topology.input if driven_by_voltage(topology) else ())), 0)
    if not output_is_current(topology):
        return _driving_point(topology, dead, topology.output, GROUND)
    first, second = topology.element(topology.output).between
    return _driving_point(topology, dead, first, second).without({topology.output: "open"})


def _driving_point(topology: Topology, potential: Mapping[str, int], first: str, second: str) -> Impedance:
    """Impedance between two nodes, some nodes held at 0.

    With a test admittance y between the nodes the determinant is d_open + y d_short, and the impedance is
    d_short / d_open.
    """
    names = _Names.of(topology)
    test = MultiAffine.symbol(len(names.elements) + len(names.departures))
    rows, columns = _equations(topology, names, potential, {}, (first, second, test))
    is_open, is_short = _determinant(topology, rows, columns).split(1 << (len(names.elements) + len(names.departures)))
    return Impedance(names.elements, names.departures, is_short, is_open)


@dataclass(frozen=True)
class _Names:
    """Elements and departures of a topology, in the order of their symbols."""

    elements: tuple[str, ...]
    departures: tuple[tuple[str, str], ...]

    @staticmethod
    def of(topology: Topology, departures: Sequence[Departure] = BASIC) -> _Names:
        symbols = [symbol for departure in departures for symbol in departure.symbols]
        return _Names(
            tuple(element.name for element in topology.elements),
            tuple((amplifier.name, symbol) for amplifier in topology.amplifiers for symbol in symbols),
        )

    def symbol(self, name: str | tuple[str, str]) -> MultiAffine:
        return MultiAffine.symbol((*self.elements, *self.departures).index(name))

    def departure(self, amplifier: str, symbol: str) -> MultiAffine:
        """A departure of an amplifier, 0 where it has none of the kind."""
        is_there = (amplifier, symbol) in self.departures
        return self.symbol((amplifier, symbol)) if is_there else MultiAffine({})


def _equations(
    topology: Topology,
    names: _Names,
    potential: Mapping[str, int],
    injected: Mapping[str, int],
    test: tuple[str, str, MultiAffine] | None = None,
) -> tuple[list[dict[int, MultiAffine]], list[int]]:
    """Rows of the nodal system, and the columns of its unknowns.

    Nodes in `potential` are held at that voltage; `injected` are currents into nodes; `test` is one more
    admittance, between two nodes.
    """
    nodes = topology.nodes()
    unknown = [node for node in nodes if node not in potential]
    row_of = {node: row for row, node in enumerate(unknown)}
    rows: list[dict[int, MultiAffine]] = [{} for _ in range(len(unknown) + len(topology.amplifiers))]

    def add(row: int, column: int, entry: MultiAffine) -> None:
        rows[row][column] = rows[row].get(column, MultiAffine({})) + entry

    def add_voltage(row: int, node: str, entry: MultiAffine) -> None:
        """entry * v(node) on the left-hand side."""
        if node in potential:
            add(row, RIGHT_HAND_SIDE, -entry.times(MultiAffine.constant(potential[node])))
        else:
            add(row, nodes.index(node), entry)

    def add_admittance(first: str, second: str, admittance: MultiAffine) -> None:
        for here, there in ((first, second), (second, first)):
            if here in row_of:
                add_voltage(row_of[here], here, admittance)
                add_voltage(row_of[here], there, -admittance)

    for element in topology.elements:
        add_admittance(*element.between, names.symbol(element.name))
    if test:
        add_admittance(*test)

    for index, amplifier in enumerate(topology.amplifiers):
        row, current = len(unknown) + index, len(nodes) + index
        of = partial(names.departure, amplifier.name)
        add_admittance(amplifier.plus, amplifier.minus, of("g_id"))
        add_admittance(amplifier.plus, GROUND, of("g_icp"))
        add_admittance(amplifier.minus, GROUND, of("g_icn"))
        add(row_of[amplifier.out], current, MultiAffine.constant(-1))
        # The row doubled, where c/2 is in it, so that coefficients stay integers.
        c = of("c_pos") - of("c_neg")
        whole = MultiAffine.constant(2 if c else 1)
        a = of("a").times(whole)
        add_voltage(row, amplifier.plus, c + whole)
        add_voltage(row, amplifier.minus, c - whole)
        add_voltage(row, amplifier.out, -a)
        add(row, current, -a.times(of("r_o")))

    for node, current_in in injected.items():
        add(row_of[node], RIGHT_HAND_SIDE, MultiAffine.constant(current_in))

    columns = [nodes.index(node) for node in unknown] + [len(nodes) + i for i in range(len(topology.amplifiers))]
    return rows, columns
