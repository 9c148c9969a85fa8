"""From a topology to its gain N/D, exactly: the nodal equations and their determinants.

Unknowns are the voltages of the nodes that no source holds, and the output current i_o of each amplifier.
Every node but ground has the row of Kirchhoff's current law; each amplifier adds the row

    (v+ - v-) - a v_out - a r_o i_o = 0,    a = 1/A_OL,

which stays finite as A_OL goes to infinity. An element enters by its admittance y, the input resistance by
g_id = 1/r_id. Every symbol has rank one in the matrix, so N and D are multi-affine in all of them.
"""

from __future__ import annotations

from dataclasses import dataclass

from gainassay.errors import InputError
from gainassay.forms.departures import DEPARTURES
from gainassay.forms.multiaffine import MultiAffine, determinant
from gainassay.forms.topology import GROUND, Topology, driven_by_voltage, output_is_current

RIGHT_HAND_SIDE = -1
"""Column of the sources in the rows of the nodal system."""


@dataclass(frozen=True)
class Gain:
    """The gain of a topology as a ratio of multi-affine polynomials.

    Attributes
    ----------
    elements : tuple[str, ...]
        Elements; the symbol numbered i is the admittance of `elements[i]`.
    departures : tuple[tuple[str, str], ...]
        (amplifier, departure); their symbols follow those of the elements.
    numerator, denominator : MultiAffine
        The gain is numerator / denominator.
    """

    elements: tuple[str, ...]
    departures: tuple[tuple[str, str], ...]
    numerator: MultiAffine
    denominator: MultiAffine

    def departure_mask(self) -> int:
        """Mask of the departures' symbols."""
        return ((1 << len(self.departures)) - 1) << len(self.elements)


def derive(topology: Topology) -> Gain:
    """The gain of a topology.

    Raises
    ------
    InputError
        If the nodal equations have no unique solution even with a real amplifier.
    """
    elements = tuple(element.name for element in topology.elements)
    departures = tuple(
        (amplifier.name, departure.symbol) for amplifier in topology.amplifiers for departure in DEPARTURES
    )
    names: list[str | tuple[str, str]] = [*elements, *departures]
    symbol = {name: MultiAffine.symbol(index) for index, name in enumerate(names)}
    rows, columns, potential, scale = _system(topology, symbol)

    whole = determinant(rows, columns)
    if not whole:
        raise InputError(
            f"{topology.source}: topology '{topology.name}': its nodal equations have no unique solution; "
            "look for a node that nothing holds, or an amplifier without feedback"
        )

    def voltage(node: str) -> MultiAffine:
        """Numerator of a node's voltage over the determinant `whole` (Cramer's rule)."""
        if node in potential:
            return whole.times(MultiAffine.constant(potential[node]))
        column = _column(topology, node)
        return determinant(rows, [RIGHT_HAND_SIDE if c == column else c for c in columns])

    if output_is_current(topology):
        first, second = topology.element(topology.output).between
        # The voltage across an element depends on its admittance in the denominator alone (Thevenin), so the
        # current y (v1 - v2) is multi-affine again.
        numerator = symbol[topology.output].times(voltage(first) - voltage(second))
    else:
        numerator = voltage(topology.output)
    return Gain(elements, departures, numerator, whole.times(MultiAffine.constant(scale)))


def _column(topology: Topology, node: str) -> int:
    return topology.nodes().index(node)


def _system(
    topology: Topology, symbol: dict[str | tuple[str, str], MultiAffine]
) -> tuple[list[dict[int, MultiAffine]], list[int], dict[str, int], int]:
    """Rows, columns of the unknowns, held potentials, and the factor by which the source was scaled up.

    A balanced pair is driven with +1 and -1 in place of +1/2 and -1/2, so that coefficients stay integers.
    """
    nodes = topology.nodes()
    scale = len(topology.input)
    held = driven_by_voltage(topology)
    drive = dict(zip(topology.input, (1, -1), strict=False))
    potential = {GROUND: 0} | (drive if held else {})
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
        add_admittance(*element.between, symbol[element.name])

    one = MultiAffine.constant(1)
    for index, amplifier in enumerate(topology.amplifiers):
        row, current = len(unknown) + index, len(nodes) + index
        a, g_id, r_o = (symbol[amplifier.name, departure.symbol] for departure in DEPARTURES)
        add_admittance(amplifier.plus, amplifier.minus, g_id)
        add(row_of[amplifier.out], current, -one)
        add_voltage(row, amplifier.plus, one)
        add_voltage(row, amplifier.minus, -one)
        add_voltage(row, amplifier.out, -a)
        add(row, current, -a.times(r_o))

    if not held:
        for node, current_in in drive.items():
            add(row_of[node], RIGHT_HAND_SIDE, MultiAffine.constant(current_in))

    columns = [nodes.index(node) for node in unknown] + [len(nodes) + i for i in range(len(topology.amplifiers))]
    return rows, columns, potential, scale
