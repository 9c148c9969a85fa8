"""Networks for tests: random ones, and a nodal solve at 60 digits of what the formulas say of them.

The solve shares nothing with the package: every amplifier is a node of its own that a source holds at
A_OL (v+ - v- + (v+ + v-)/(2 CMRR)), with r_o as a resistor from there to the output.
"""

from __future__ import annotations

import random
from collections.abc import Mapping

import mpmath

import oracle
from gainassay.forms.topology import GROUND, Topology

DIGITS = 60

Values = Mapping[str, mpmath.mpf]
"""By the names that formulas use: impedances of elements, and A, r_id, r_o of amplifiers.

Where there are r_icp, r_icn and CMRR, they count; formulas do not know them.
"""


UNSEEN = {
    "bridged T feedback": oracle.network(
        {
            "r1": ("in", "sum"),
            "r2": ("sum", "tee"),
            "r3": ("tee", "ground"),
            "r4": ("tee", "out"),
            "r5": ("sum", "out"),
            "r_load": ("out", "ground"),
        },
        [("ground", "sum", "out")],
    ),
    "bridge in the feedback": oracle.network(
        {
            "r1": ("out", "a"),
            "r2": ("out", "b"),
            "r3": ("a", "b"),
            "r4": ("a", "ground"),
            "r5": ("b", "ground"),
            "r6": ("b", "minus"),
            "r7": ("minus", "ground"),
        },
        [("in", "minus", "out")],
    ),
    "cascade with interstage loading": oracle.network(
        {"r1": ("a", "ground"), "r2": ("a", "mid"), "r3": ("mid", "b"), "r4": ("b", "out")},
        [("in", "a", "mid"), ("ground", "b", "out")],
    ),
    "composite": oracle.network(
        {"r1": ("a", "ground"), "r2": ("a", "out"), "r3": ("b", "ground"), "r4": ("b", "out")},
        [("in", "a", "mid"), ("mid", "b", "out")],
    ),
    "two-amplifier instrumentation stage": oracle.network(
        {"r1": ("ground", "a"), "r2": ("a", "mid"), "r3": ("mid", "b"), "r4": ("b", "out"), "r_g": ("a", "b")},
        [("in_n", "a", "mid"), ("in_p", "b", "out")],
        source=("in_p", "in_n"),
    ),
    "improved current pump": oracle.network(
        {
            "r1": ("ground", "minus"),
            "r2": ("minus", "drive"),
            "r3": ("in", "plus"),
            "r4": ("plus", "load"),
            "r5": ("drive", "load"),
            "r_load": ("load", "ground"),
        },
        [("plus", "minus", "drive")],
        output="r_load",
        gain="transconductance",
    ),
    "current amplifier": oracle.network(
        {"r1": ("in", "mid"), "r2": ("mid", "ground"), "load": ("mid", "out")},
        [("ground", "in", "out")],
        output="load",
        gain="current",
    ),
    "current into a pair": oracle.network(
        {"r1": ("inp", "out"), "r2": ("inn", "ground"), "r3": ("inp", "inn")},
        [("inn", "inp", "out")],
        source=("inp", "inn"),
        gain="transresistance",
    ),
    "bridge between both inputs": oracle.network(
        {
            "r1": ("in", "minus"),
            "r2": ("in", "plus"),
            "r3": ("minus", "plus"),
            "r4": ("plus", "ground"),
            "r5": ("minus", "out"),
        },
        [("plus", "minus", "out")],
    ),
    "current into a load": oracle.network(
        {"r1": ("sense", "ground"), "load": ("out", "sense")},
        [("in", "sense", "out")],
        output="load",
        gain="transconductance",
    ),
}
"""Stages of kinds that the library has not, or not in this shape."""


def random_network(rng: random.Random, amplifiers: int, extra: int = 3) -> Topology:
    """A network of 2 to 7 nodes: a random tree of elements to ground, more elements, and amplifiers."""
    nodes = ["in", "out", "n1", "n2", "n3", "n4", "n5"][: rng.randint(max(2, amplifiers + 1), 7)]
    everywhere = [GROUND, *nodes]
    between = [(node, rng.choice(everywhere[: place + 1])) for place, node in enumerate(nodes)]
    between += [(first, second) for first, second in (rng.sample(everywhere, 2) for _ in range(rng.randint(1, extra)))]
    outputs = ["out", *rng.sample(nodes[2:], amplifiers - 1)]
    return oracle.network(
        {f"r{number}": pair for number, pair in enumerate(between, start=1)},
        [(*_two(rng, everywhere), output) for output in outputs],
    )


def _two(rng: random.Random, nodes: list[str]) -> tuple[str, str]:
    first, second = rng.sample(nodes, 2)
    return first, second


def random_values(topology: Topology, rng: random.Random) -> dict[str, mpmath.mpf]:
    """A value for every quantity of the formulas, spread over decades."""
    several = len(topology.amplifiers) > 1

    def value(low: float, high: float) -> mpmath.mpf:
        return mpmath.mpf(10.0 ** rng.uniform(low, high))

    found = {element.name: value(1, 6) for element in topology.elements}
    for amplifier in topology.amplifiers:
        suffix = f"_{amplifier.name}" if several else ""
        found |= {f"A{suffix}": value(2, 7), f"r_id{suffix}": value(4, 9), f"r_o{suffix}": value(0, 3)}
    return found


def impedances(topology: Topology, values: Values, s: mpmath.mpc) -> dict[str, mpmath.mpf]:
    """The same with the impedance at s of each capacitor and inductor."""
    at_s = {"resistor": lambda v: v, "capacitor": lambda v: 1 / (s * v), "inductor": lambda v: s * v}
    return {**values, **{e.name: at_s[e.kind](values[e.name]) for e in topology.elements}}


def gain(topology: Topology, values: Values) -> mpmath.mpf:
    """Output over input."""
    if topology.gain in ("voltage", "transconductance"):
        drive = (1,) if len(topology.input) == 1 else (mpmath.mpf(1) / 2, mpmath.mpf(-1) / 2)
        voltages = solve(topology, values, held=dict(zip(topology.input, drive, strict=True)))
    else:
        voltages = solve(topology, values, injected=dict(zip(topology.input, (1, -1), strict=False)))
    if topology.gain in ("voltage", "transresistance"):
        return voltages[topology.output]
    first, second = topology.element(topology.output).between
    return (voltages[first] - voltages[second]) / values[topology.output]


def input_impedance(topology: Topology, values: Values) -> mpmath.mpf:
    """Seen by the source, which is taken away."""
    first, second = (*topology.input, GROUND)[:2]
    voltages = solve(topology, values, injected={first: 1, second: -1})
    return voltages[first] - voltages[second]


def input_impedance_at(topology: Topology, values: Values, node: str) -> mpmath.mpf:
    """Seen at one node of a pair, the other source dead."""
    is_held = topology.gain in ("voltage", "transconductance")
    held = {other: 0 for other in topology.input if other != node} if is_held else {}
    return solve(topology, values, held=held, injected={node: 1})[node]


def output_impedance(topology: Topology, values: Values) -> mpmath.mpf:
    """Seen by a load; the source is dead."""
    held = dict.fromkeys(topology.input, 0) if topology.gain in ("voltage", "transconductance") else {}
    if topology.gain in ("voltage", "transresistance"):
        return solve(topology, values, held=held, injected={topology.output: 1})[topology.output]
    first, second = topology.element(topology.output).between
    open_output = {**values, topology.output: mpmath.inf}
    voltages = solve(topology, open_output, held=held, injected={first: 1, second: -1})
    return voltages[first] - voltages[second]


def return_ratio(topology: Topology, values: Values, amplifier: str) -> mpmath.mpf | mpmath.mpc:
    """What comes back, sign changed, of 1 V put in place of A_OL (v+ - v-) of one amplifier.

    `values` may be complex: impedances and open-loop gains at a frequency.
    """
    held = dict.fromkeys(topology.input, 0) if topology.gain in ("voltage", "transconductance") else {}
    voltages = solve(topology, values, held=held, forced=amplifier)
    pins = next(a for a in topology.amplifiers if a.name == amplifier)
    suffix = f"_{amplifier}" if len(topology.amplifiers) > 1 else ""
    of_plus, of_minus = _gains_of_inputs(values, suffix)
    return -values[f"A{suffix}"] * (of_plus * voltages[pins.plus] - of_minus * voltages[pins.minus])


def _gains_of_inputs(values: Values, suffix: str) -> tuple[mpmath.mpf, mpmath.mpf]:
    """By how much A_OL is larger from the plus and smaller from the minus input, since the common mode counts."""
    half = 1 / (2 * values.get(f"CMRR{suffix}", mpmath.inf))
    return 1 + half, 1 - half


def solve(
    topology: Topology,
    values: Values,
    held: Mapping[str, object] | None = None,
    injected: Mapping[str, int] | None = None,
    forced: str = "",
) -> dict[str, mpmath.mpf]:
    """Voltage of every node; `forced` is an amplifier whose inner source is held at 1 V."""
    held, injected = held or {}, injected or {}
    nodes = [GROUND, *topology.nodes(), *(f"inside {a.name}" for a in topology.amplifiers)]
    place = {node: index for index, node in enumerate(nodes)}
    matrix, right = mpmath.zeros(len(nodes)), mpmath.zeros(len(nodes), 1)
    branches = [(*element.between, values[element.name]) for element in topology.elements]
    several = len(topology.amplifiers) > 1
    for amplifier in topology.amplifiers:
        suffix = f"_{amplifier.name}" if several else ""
        branches.append((amplifier.plus, amplifier.minus, values[f"r_id{suffix}"]))
        branches.append((amplifier.plus, GROUND, values.get(f"r_icp{suffix}", mpmath.inf)))
        branches.append((amplifier.minus, GROUND, values.get(f"r_icn{suffix}", mpmath.inf)))
        branches.append((f"inside {amplifier.name}", amplifier.out, values[f"r_o{suffix}"]))
    for first, second, impedance in branches:
        for here, there in ((first, second), (second, first)):
            matrix[place[here], place[here]] += 1 / impedance
            matrix[place[here], place[there]] -= 1 / impedance
    for node, current in injected.items():
        right[place[node]] += current

    def hold(node: str, voltage: object, control: Mapping[str, mpmath.mpf] | None = None) -> None:
        """Replace the current law of a node by: its voltage less what controls it is `voltage`."""
        for column in range(len(nodes)):
            matrix[place[node], column] = 0
        matrix[place[node], place[node]] = 1
        for other, factor in (control or {}).items():
            matrix[place[node], place[other]] -= factor
        right[place[node]] = voltage

    hold(GROUND, 0)
    for node, voltage in held.items():
        hold(node, voltage)
    for amplifier in topology.amplifiers:
        suffix = f"_{amplifier.name}" if several else ""
        a_ol = values[f"A{suffix}"]
        if amplifier.name == forced:
            hold(f"inside {amplifier.name}", 1)
        else:
            of_plus, of_minus = _gains_of_inputs(values, suffix)
            hold(f"inside {amplifier.name}", 0, {amplifier.plus: a_ol * of_plus, amplifier.minus: -a_ol * of_minus})
    solution = mpmath.lu_solve(matrix, right)
    return {node: solution[index] for node, index in place.items()}
