"""A topology: elements and amplifiers between nodes, an input and an output, read from a TOML file."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from gainassay import resources
from gainassay.contracts import documents, tables
from gainassay.errors import InputError

GROUND = "ground"


@dataclass(frozen=True)
class Element:
    """A two-terminal element.

    Attributes
    ----------
    name : str
        Its name, which is also its column in the stage table.
    kind : str
        `resistor`.
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
    source : str
        The file it was read from, as messages name it.
    """

    name: str
    summary: str
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

    def content_hash(self) -> str:
        """SHA-256 of all that decides the network; the summary and the file's name do not."""
        network = [
            self.name,
            self.gain,
            self.input,
            self.output,
            [(e.name, e.kind, e.between, e.absent) for e in self.elements],
            [(a.name, a.plus, a.minus, a.out) for a in self.amplifiers],
        ]
        return hashlib.sha256(json.dumps(network).encode()).hexdigest()


def read(path: Path) -> Topology:
    """The topology in a TOML file.

    Raises
    ------
    InputError
        If the file cannot be read, does not follow the schema, or names a network that makes no sense.
    """
    document = documents.read_toml(path, "topology")
    return from_document(document, str(path))


def from_document(document: Mapping[str, Any], source: str) -> Topology:
    """The topology in a parsed document that follows `schemas/topology.schema.json`.

    Raises
    ------
    InputError
        If the document names a network that makes no sense.
    """
    given = document["input"]
    topology = Topology(
        name=document["topology"],
        summary=document["summary"],
        gain=document["gain"],
        input=(given,) if isinstance(given, str) else tuple(given),
        output=document["output"],
        elements=tuple(
            Element(name, element["kind"], tuple(element["between"]), element.get("absent", "error"))
            for name, element in document["elements"].items()
        ),
        amplifiers=tuple(
            Amplifier(name, amplifier["plus"], amplifier["minus"], amplifier["out"])
            for name, amplifier in document["amplifiers"].items()
        ),
        source=source,
    )
    _check(topology)
    return topology


def _check(topology: Topology) -> None:
    """Refuse what no algebra can mend, with the name of the culprit."""
    where = f"{topology.source}: topology '{topology.name}'"
    nodes = topology.nodes()
    if GROUND in topology.input:
        raise InputError(f"{where}: the input is ground; name the node where the signal enters")
    if len(set(topology.input)) != len(topology.input):
        raise InputError(f"{where}: both nodes of the input pair are '{topology.input[0]}'; name two nodes")
    reserved = tables.reserved_stage_columns()
    for element in topology.elements:
        if element.between[0] == element.between[1]:
            raise InputError(f"{where}: {element.name} joins node '{element.between[0]}' to itself")
        if element.name in reserved or element.name.endswith(tables.ELEMENT_SUFFIXES):
            raise InputError(
                f"{where}: an element cannot be called '{element.name}': the stage table has a column of that name "
                "for something else; rename the element"
            )
    for amplifier in topology.amplifiers:
        if amplifier.plus == amplifier.minus:
            raise InputError(f"{where}: both inputs of {amplifier.name} are node '{amplifier.plus}'")
        if amplifier.out == GROUND:
            raise InputError(f"{where}: the output of {amplifier.name} is tied to ground")
        if driven_by_voltage(topology) and amplifier.out in topology.input:
            raise InputError(f"{where}: the output of {amplifier.name} is tied to the input '{amplifier.out}'")
    outputs = [amplifier.out for amplifier in topology.amplifiers]
    for node in outputs:
        if outputs.count(node) > 1:
            raise InputError(f"{where}: two amplifiers drive node '{node}'")
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


def driven_by_voltage(topology: Topology) -> bool:
    """Whether the input is a voltage (else it is a current)."""
    return topology.gain in ("voltage", "transconductance")


def output_is_current(topology: Topology) -> bool:
    """Whether the output is the current through an element (else it is a node's voltage)."""
    return topology.gain in ("transconductance", "current")


def gain_unit(topology: Topology) -> str:
    """Unit of the gain."""
    return {"voltage": "V/V", "transresistance": "V/A", "transconductance": "A/V", "current": "A/A"}[topology.gain]


def library(own: Iterable[Path] = ()) -> dict[str, Topology]:
    """The built-in topologies and a job's own, by name.

    Raises
    ------
    InputError
        If two files give the same name.
    """
    found: dict[str, Topology] = {}
    for path in [*sorted(resources.topologies().glob("*.toml")), *own]:
        topology = read(path)
        if topology.name in found:
            raise InputError(
                f"{path}: the name '{topology.name}' is taken by {found[topology.name].source}; rename the topology"
            )
        found[topology.name] = topology
    return found
