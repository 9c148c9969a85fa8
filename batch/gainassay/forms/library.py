"""Topology files: the built-in ones and a user's own."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

from gainassay import resources
from gainassay.contracts import documents
from gainassay.errors import InputError
from gainassay.forms import soundness
from gainassay.forms.topology import Amplifier, Element, Topology


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
        known_as=tuple(document.get("known_as", ())),
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
    soundness.statement(topology)
    return topology


def library(own: Iterable[Path] = ()) -> dict[str, Topology]:
    """The built-in topologies and a job's own, by name.

    Raises
    ------
    InputError
        If two files give the same name, or one name to elements of different kinds.
    """
    found: dict[str, Topology] = {}
    for path in [*sorted(resources.topologies().glob("*.toml")), *own]:
        topology = read(path)
        if topology.name in found:
            if topology.content_hash() == found[topology.name].content_hash():
                raise InputError(f"{path}: topology '{topology.name}' is known already; leave the file out of the job")
            raise InputError(
                f"{path}: the name '{topology.name}' is taken by {found[topology.name].source}; rename the topology"
            )
        found[topology.name] = topology
    _one_kind_for_each_name(found.values())
    return found


def _one_kind_for_each_name(topologies: Iterable[Topology]) -> None:
    """An element's name is a column of the stage table, so it has one unit."""
    first: dict[str, tuple[str, Topology]] = {}
    for topology in topologies:
        for element in topology.elements:
            kind, other = first.setdefault(element.name, (element.kind, topology))
            if kind != element.kind:
                raise InputError(
                    f"{topology.where()}: {element.name} is a {element.kind}, but topology '{other.name}' has a {kind} "
                    "of that name, and both share a column of the stage table; rename one"
                )
