"""Numbers that a person gives for a formula."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pyarrow as pa

from gainassay.contracts import tables
from gainassay.contracts.documents import nearest
from gainassay.contracts.quantities import numbers
from gainassay.errors import InputError
from gainassay.forms.expression import Quantity
from gainassay.forms.meaningful import quantities
from gainassay.forms.topology import Topology

UNITS = {"open_loop_gain": "V/V", "capacitor": "F", "inductor": "H"}
"""Unit of a quantity by its kind; ohm for all others."""


def filled_in(topology: Topology, given: Sequence[str]) -> tuple[dict[str, str], dict[str, float]]:
    """What is left out, and the value of each quantity [ohm, F, H, V/V], from texts such as `r1=4k7`.

    An optional element without a value is left out as its topology says, an amplifier's quantity without a
    value as ideal; at 0 Hz capacitors are open and inductors short.

    Raises
    ------
    InputError
        If a text is no NAME=VALUE, a name is none of the formula's, a value cannot be read, or one is missing.
    """
    known = {quantity.name: quantity for quantity in quantities(topology)}
    values: dict[str, float] = {}
    for text in given:
        name, equals, value = (part.strip() for part in text.partition("="))
        if not equals:
            raise InputError(f"--at: {text!r} is not of the form NAME=VALUE")
        if name not in known:
            hint = nearest(name, known) or f"; they are {', '.join(known)}"
            raise InputError(f"--at: topology '{topology.name}' has no quantity {name!r}{hint}")
        if name in values:
            raise InputError(f"--at: {name} is given twice; which is meant?")
        values[name] = _number(known[name], value)
    at_dc = topology.at_dc()
    absent = {e.name: e.absent for e in topology.elements if e.name not in values and e.absent != "error"}
    missing = [e.name for e in topology.elements if e.name not in values and e.name not in {**absent, **at_dc}]
    if missing:
        raise InputError(f"--at: no value is given for {', '.join(missing)}")
    elements = {element.name for element in topology.elements}
    ideal = {name: "ideal" for name in known if name not in values and name not in elements}
    return {**absent, **ideal, **at_dc}, values


def _number(quantity: Quantity, text: str) -> float:
    kind = quantity.kind if quantity.kind in ("capacitor", "inductor") else "resistor"
    column = replace(tables.column("stages", f"<{kind}>").of(quantity.name), unit=UNITS.get(quantity.kind, "ohm"))
    found = numbers(pa.array([text], pa.string()), column)
    if found.refused or np.isnan(found.values[0]):
        raise InputError(f"--at: {quantity.name} = {text!r} {found.refused.get(0, 'is blank')}")
    return float(found.values[0])
