"""A topology: elements and amplifiers between nodes, an input and an output."""

from __future__ import annotations

import hashlib
import json
from dataclasses import dataclass

GROUND = "ground"


@dataclass(frozen=True)
class Element:
    """A two-terminal element.

    Attributes
    ----------
    name : str
        Its name, which is also its column in the stage table.
    kind : str
        `resistor`, `capacitor` or `inductor`.
    between : tuple[str, str]
        The nodes it joins.
    absent : str
        What a blank in the stage table means: `open`, `short`, or `error`.
    """

    name: str
    kind: str
    between: tuple[str, str]
    absent: str


@dataclass(frozen=True)
class Amplifier:
    """An op-amp, with the nodes of its inputs and of its output."""

    name: str
    plus: str
    minus: str
    out: str


@dataclass(frozen=True)
class Topology:
    """A named network with an input and an output.

    Attributes
    ----------
    gain : str
        `voltage`, `transresistance`, `transconductance` or `current`.
    input : tuple[str, ...]
        One node, or the two nodes of a balanced pair.
    output : str
        A node; for `transconductance` and `current`, an element.
    known_as : tuple[str, ...]
        Its usual names in the trade.
    source : str
        The file it was read from, as messages name it.
    """

    name: str
    summary: str
    known_as: tuple[str, ...]
    gain: str
    input: tuple[str, ...]
    output: str
    elements: tuple[Element, ...]
    amplifiers: tuple[Amplifier, ...]
    source: str

    def nodes(self) -> tuple[str, ...]:
        """All nodes but ground, in the order in which the file first names them."""
        named = [
            *self.input,
            *(node for element in self.elements for node in element.between),
            *(node for amplifier in self.amplifiers for node in (amplifier.plus, amplifier.minus, amplifier.out)),
        ]
        return tuple(node for node in dict.fromkeys(named) if node != GROUND)

    def element(self, name: str) -> Element:
        """The element of that name."""
        return next(element for element in self.elements if element.name == name)

    def at_dc(self) -> dict[str, str]:
        """What is left out at 0 Hz: capacitors are open, inductors short."""
        states = {"capacitor": "open", "inductor": "short"}
        return {element.name: states[element.kind] for element in self.elements if element.kind in states}

    def where(self) -> str:
        """How messages name it."""
        return f"{self.source}: topology '{self.name}'"

    def content_hash(self) -> str:
        """SHA-256 of all that decides the network; summary, trade names and file name do not."""
        network = [
            self.name,
            self.gain,
            self.input,
            self.output,
            [(e.name, e.kind, e.between, e.absent) for e in self.elements],
            [(a.name, a.plus, a.minus, a.out) for a in self.amplifiers],
        ]
        return hashlib.sha256(json.dumps(network).encode()).hexdigest()


def driven_by_voltage(topology: Topology) -> bool:
    """Whether the input is a voltage (else it is a current)."""
    return topology.gain in ("voltage", "transconductance")


def output_is_current(topology: Topology) -> bool:
    """Whether the output is the current through an element (else it is a node's voltage)."""
    return topology.gain in ("transconductance", "current")


def gain_unit(topology: Topology) -> str:
    """Unit of the gain."""
    return {"voltage": "V/V", "transresistance": "V/A", "transconductance": "A/V", "current": "A/A"}[topology.gain]
