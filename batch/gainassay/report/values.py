"""Numbers that a person gives for a formula."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import pyarrow as pa

from gainassay.contracts import tables
from gainassay.contracts.documents import nearest
from gainassay.contracts.quantities import numbers
from gainassay.errors import InputError
from gainassay.forms.meaningful import Formulas
from gainassay.forms.topology import Topology


def filled_in(topology: Topology, formulas: Formulas, given: Sequence[str]) -> tuple[dict[str, str], dict[str, float]]:
    """What is left out, and the value of each quantity [ohm, F, H, V/V], from texts such as `r1=4k7`.

    An optional element without a value is left out as its topology says; an amplifier's quantity without a value
    is ideal.

    Raises
    ------
    InputError
        If a text is no NAME=VALUE, a name is none of the formula's, a value cannot be read, or one is missing.
    """
    known = {quantity.name: quantity for quantity in formulas.quantities}
    values: dict[str, float] = {}
    for text in given:
        name, equals, value = text.partition("=")
        if not equals:
            raise InputError(f"--at: {text!r} is not of the form NAME=VALUE")
        if name not in known:
            hint = nearest(name, known) or f"; they are {', '.join(known)}"
            raise InputError(f"--at: topology '{topology.name}' has no quantity {name!r}{hint}")
        kind = known[name].kind if known[name].kind in ("capacitor", "inductor") else "resistor"
        column = tables.column("stages", f"<{kind}>").of(name)
        found = numbers(pa.array([value], pa.string()), column)
        if found.refused or np.isnan(found.values[0]):
            raise InputError(f"--at: {name} = {value!r} {found.refused.get(0, 'is blank')}")
        values[name] = float(found.values[0])
    absent = {e.name: e.absent for e in topology.elements if e.name not in values and e.absent != "error"}
    missing = [e.name for e in topology.elements if e.name not in values and e.name not in absent]
    if missing:
        raise InputError(f"--at: no value is given for {', '.join(missing)}")
    ideal = {q.name: math.inf if q.reciprocal else 0.0 for q in formulas.quantities}
    return absent, {**{name: value for name, value in ideal.items() if name not in absent}, **values}
