"""What is wrong with a topology, said precisely: in its statement, in its network, in its gain."""

from __future__ import annotations

from collections.abc import Iterable

from gainassay.contracts import tables
from gainassay.errors import InputError
from gainassay.forms import nodal
from gainassay.forms.departures import DEPARTURES
from gainassay.forms.form import Form, Ratio
from gainassay.forms.multiaffine import factors
from gainassay.forms.topology import GROUND, Amplifier, Topology, driven_by_voltage, output_is_current

RESERVED = ("s", *(name for departure in DEPARTURES for name in (*departure.symbols, departure.quantity)))
"""Names that a formula gives to an amplifier's own quantities and to the complex frequency."""


MOST_AMPLIFIERS = 3
"""Amplifiers in a stage: with each one more, a form has about five times as many terms."""


def statement(topology: Topology) -> None:
    """Refuse names that clash and nodes that cannot be what they are said to be.

    Raises
    ------
    InputError
        With the culprit and what to do.
    """
    where, nodes = topology.where(), topology.nodes()
    if GROUND in topology.input:
        raise InputError(f"{where}: the input is ground; name the node where the signal enters")
    if len(set(topology.input)) != len(topology.input):
        raise InputError(f"{where}: both nodes of the input pair are '{topology.input[0]}'; name two nodes")
    _names(topology)
    for element in topology.elements:
        if element.between[0] == element.between[1]:
            raise InputError(f"{where}: {element.name} joins node '{element.between[0]}' to itself")
    if len(topology.amplifiers) > MOST_AMPLIFIERS:
        raise InputError(
            f"{where}: it has {len(topology.amplifiers)} amplifiers; a stage has {MOST_AMPLIFIERS} at most"
        )
    drivers: dict[str, str] = {}
    for amplifier in topology.amplifiers:
        if amplifier.plus == amplifier.minus:
            raise InputError(f"{where}: both inputs of {amplifier.name} are node '{amplifier.plus}'")
        if amplifier.out == GROUND:
            raise InputError(f"{where}: the output of {amplifier.name} is tied to ground")
        if driven_by_voltage(topology) and amplifier.out in topology.input:
            raise InputError(f"{where}: the output of {amplifier.name} is tied to the input '{amplifier.out}'")
        if amplifier.out in drivers:
            raise InputError(
                f"{where}: {drivers[amplifier.out]} and {amplifier.name} both drive node '{amplifier.out}'"
            )
        drivers[amplifier.out] = amplifier.name
    if output_is_current(topology):
        if topology.output not in {element.name for element in topology.elements}:
            raise InputError(
                f'{where}: with gain = "{topology.gain}" the output names the element whose current is meant; '
                f"'{topology.output}' is none of its elements"
            )
    elif topology.output not in nodes:
        raise InputError(f"{where}: the output '{topology.output}' is no node of it; the nodes are {', '.join(nodes)}")
    elif topology.output in topology.input:
        raise InputError(f"{where}: input and output are the same node, '{topology.output}'")


def _names(topology: Topology) -> None:
    where, reserved = topology.where(), tables.reserved_stage_columns()
    amplifiers = {amplifier.name for amplifier in topology.amplifiers}
    for element in topology.elements:
        if element.name in reserved or element.name.endswith(tables.ELEMENT_SUFFIXES):
            raise InputError(
                f"{where}: an element cannot be called '{element.name}': the stage table has a column of that "
                "name for something else; rename the element"
            )
        if element.name in RESERVED:
            raise InputError(
                f"{where}: an element cannot be called '{element.name}': a formula means the amplifier's own by it, "
                "or the complex frequency; rename the element"
            )
        if element.name in amplifiers:
            raise InputError(f"{where}: an element and an amplifier are both called '{element.name}'; rename one")


def network(topology: Topology) -> None:
    """Refuse a network that cannot work whatever its values: loose ends, floating parts, no feedback.

    Raises
    ------
    InputError
        With the culprit and what to do.
    """
    where = topology.where()
    joined = _joined(topology)
    for node in topology.nodes():
        if len(joined[node]) == 1:
            raise InputError(
                f"{where}: node '{node}' is joined to {joined[node][0]} alone; "
                "join it to something else, a load that may be blank perhaps, or leave that out"
            )
    floating = set(topology.nodes()) - _reached(topology, _anchors(topology), set())
    if floating:
        named = ", ".join(f"'{node}'" for node in topology.nodes() if node in floating)
        raise InputError(
            f"{where}: nothing joins {named} to ground, to a source or to an amplifier's output, "
            "directly or through other elements"
        )
    for amplifier in topology.amplifiers:
        influenced = _influenced(topology, amplifier)
        if not influenced & {amplifier.plus, amplifier.minus}:
            raise InputError(
                f"{where}: no feedback: nothing leads from the output of {amplifier.name} back to its inputs"
            )


def _joined(topology: Topology) -> dict[str, list[str]]:
    """By node, what is joined to it."""
    joined: dict[str, list[str]] = {node: [] for node in (GROUND, *topology.nodes())}
    for element in topology.elements:
        for node in element.between:
            joined[node].append(element.name)
    for amplifier in topology.amplifiers:
        for pin in ("plus", "minus", "out"):
            joined[getattr(amplifier, pin)].append(f"{amplifier.name}.{pin}")
    for node in topology.input:
        joined[node].append("the source")
    return joined


def _held(topology: Topology) -> set[str]:
    """Nodes whose voltage nothing in the network can change."""
    return {GROUND, *(topology.input if driven_by_voltage(topology) else ())}


def _anchors(topology: Topology) -> set[str]:
    return _held(topology) | {amplifier.out for amplifier in topology.amplifiers}


def _reached(topology: Topology, start: Iterable[str], walls: set[str]) -> set[str]:
    """Nodes that elements join to those in `start`, without going through a node of `walls`."""
    reached = set(start)
    while True:
        more = {
            there
            for element in topology.elements
            for here, there in (element.between, element.between[::-1])
            if here in reached and there not in reached and there not in walls
        }
        if not more:
            return reached
        reached |= more


def _influenced(topology: Topology, amplifier: Amplifier) -> set[str]:
    """Nodes whose voltage the output of an amplifier can change, through elements and other amplifiers."""
    influenced = {amplifier.out}
    others = [other for other in topology.amplifiers if other is not amplifier]
    while True:
        driven = {other.out for other in others if influenced & {other.plus, other.minus}}
        walls = _held(topology) | {other.out for other in others} - driven
        more = _reached(topology, influenced | driven, walls)
        if more == influenced:
            return influenced
        influenced = more


def function(topology: Topology, form: Form) -> None:
    """Refuse a gain that some element never influences, or whose feedback is positive whatever the values.

    Raises
    ------
    InputError
        With the culprit and what to do.
    """
    where = topology.where()
    gain = nodal.derive(topology)
    over, under = ({*factors(polynomial)[1]} for polynomial in (gain.numerator, gain.denominator))
    support = 0
    for factor in over ^ under:
        support |= factor.support()
    for index, element in enumerate(gain.elements):
        if not support >> index & 1:
            raise InputError(f"{where}: {element} never influences the gain; leave it out")
    for amplifier in topology.amplifiers:
        own = [len(gain.elements) + i for i, (name, _) in enumerate(gain.departures) if name == amplifier.name]
        if not any(support >> index & 1 for index in own):
            raise InputError(f"{where}: {amplifier.name} never influences the gain; leave it out")
    for place in form.loops():
        if sign(form.loadings[place]) < 0:
            amplifiers = " and ".join(form.departures[departure][0] for departure in form.monomials[place])
            raise InputError(
                f"{where}: the feedback around {amplifiers} is positive for all element values: the output would run "
                "to its limit; exchange plus and minus of an amplifier"
            )


def sign(ratio: Ratio) -> int:
    """Sign of a ratio over all positive element values: 1, -1, or 0 where it depends on them or is zero."""
    signs = {value > 0 for value, _ in ratio.numerator}, {value > 0 for value, _ in ratio.denominator}
    if any(len(found) != 1 for found in signs):
        return 0
    return 1 if signs[0] == signs[1] else -1
