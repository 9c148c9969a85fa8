"""What amplifiers must do, against a nodal solve at 60 digits with amplifiers of next to infinite gain."""

from __future__ import annotations

import random
from collections.abc import Mapping, Sequence

import mpmath
import numpy as np
import pytest

from forms import networks
from gainassay.forms import coefficients, duty
from gainassay.forms.coefficients import Pairs
from gainassay.forms.duty import Work
from gainassay.forms.form import Ratio
from gainassay.forms.library import library
from gainassay.forms.topology import Topology, driven_by_voltage, output_is_current

TOPOLOGIES = {**library(), **networks.UNSEEN}
POINTS = 5


def values_of(topology: Topology, rng: random.Random, a_ol: str) -> networks.Values:
    """Elements at random, all of them as resistors, and amplifiers without input current."""
    found = networks.random_values(topology, rng)
    ideal = {"A": mpmath.mpf(a_ol), "r_id": mpmath.inf, "r_o": mpmath.mpf(1)}
    stems = {name: name.partition("_u")[0] for name in found}
    return {name: ideal.get(stems[name], value) for name, value in found.items()}


def at(ratios: Sequence[Ratio], topology: Topology, values: networks.Values) -> list[float]:
    ohms = np.array([[float(values[element.name])] for element in topology.elements])
    return [float(value) for value in coefficients.ratios(ratios, Pairs(np.ones_like(ohms), ohms))[:, 0]]


def close(found: Sequence[float], expected: Sequence[mpmath.mpf], scale: mpmath.mpf) -> bool:
    return all(abs(f - e) <= 1e-9 * abs(e) + 1e-13 * abs(scale) for f, e in zip(found, expected, strict=True))


def check(
    work: Work, topology: Topology, values: networks.Values, node: Mapping[str, mpmath.mpf], reference: mpmath.mpf
) -> None:
    pins = topology.amplifiers
    v_out = [node[a.out] / reference for a in pins]
    i_out = [(node[f"inside {a.name}"] - node[a.out]) / reference for a in pins]
    v_in = [node[a.plus] / reference for a in pins]
    largest = max(abs(v) for v in node.values()) / abs(reference)
    assert close(at(work.v_out, topology, values), v_out, largest)
    assert close(at(work.i_out, topology, values), i_out, max(map(abs, i_out)))
    assert close(at(work.v_in, topology, values), v_in, largest)


@pytest.mark.oracle
@pytest.mark.parametrize("topology", TOPOLOGIES.values(), ids=TOPOLOGIES)
def test_work_of_signal_and_of_bias(topology: Topology) -> None:
    rng, found = random.Random(topology.content_hash()), duty.derive(topology)
    is_held = driven_by_voltage(topology)
    drive = dict(zip(topology.input, (1, -1), strict=False))
    for _ in range(POINTS):
        with mpmath.workdps(networks.DIGITS):
            values = values_of(topology, rng, "1e30")
            node = networks.solve(topology, values, drive if is_held else {}, {} if is_held else drive)
            output = node.get(topology.output)
            if output_is_current(topology):
                first, second = topology.element(topology.output).between
                output = node[first] - node[second]
            check(found.of_signal, topology, values, node, output)
            assert (found.of_bias is not None) == is_held
            if found.of_bias:
                node = networks.solve(topology, values, held=dict.fromkeys(topology.input, 1))
                check(found.of_bias, topology, values, node, mpmath.mpf(1))


@pytest.mark.oracle
@pytest.mark.parametrize("topology", TOPOLOGIES.values(), ids=TOPOLOGIES)
def test_feedback(topology: Topology) -> None:
    rng, found = random.Random(topology.content_hash()), duty.derive(topology)
    dead = dict.fromkeys(topology.input, 0) if driven_by_voltage(topology) else {}
    with mpmath.workdps(networks.DIGITS):
        values = values_of(topology, rng, "0")
        stiff = {name: mpmath.mpf("1e-40") if name.startswith("r_o") else value for name, value in values.items()}
        for place, sending in enumerate(topology.amplifiers):
            node = networks.solve(topology, stiff, held=dead, forced=sending.name)
            brought = [node[a.minus] - node[a.plus] for a in topology.amplifiers]
            column = [row[place] for row in found.feedback]
            assert close(at(column, topology, values), brought, mpmath.mpf(1))
