"""An independent solver of stages, to hold Gainassay against.

`gain` shares no formula with the package: unknowns are node voltages *and* every branch current, elements enter
by their resistance or complex impedance, the amplifier by A_OL itself with r_o as a resistor in series, and numbers are
solved for at 60 digits. Where many solves are needed `gains`, a plain nodal solve in double precision, does them in a
batch; it writes the amplifier with 1/A_OL, as the package does, but has its matrices solved numerically.
"""

from __future__ import annotations

import random
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import mpmath
import numpy as np
from numpy.typing import NDArray

from gainassay.forms.topology import GROUND, Amplifier, Element, Topology

DIGITS = 60
OPEN = float("inf")


@dataclass(frozen=True)
class Part:
    """An op-amp; the default is ideal. a_ol and cmrr, of either sign, [V/V]; all others [ohm].

    r_icp and r_icn are the common-mode resistances from the plus and from the minus input to ground. At a frequency
    all but r_o may be complex.
    """

    a_ol: float | mpmath.mpc = OPEN
    r_id: float | mpmath.mpc = OPEN
    r_o: float = 0.0
    r_icp: float | mpmath.mpc = OPEN
    r_icn: float | mpmath.mpc = OPEN
    cmrr: float | mpmath.mpc = OPEN


IDEAL = Part()


def gain(topology: Topology, ohms: Mapping[str, float | mpmath.mpc], parts: Part | Mapping[str, Part]) -> mpmath.mpf:
    """The gain of a stage at 60 digits; `parts` is one part for all amplifiers or one for each."""
    with mpmath.workdps(DIGITS):
        return _tableau(topology, ohms, parts)


def _tableau(
    topology: Topology, ohms: Mapping[str, float | mpmath.mpc], parts: Part | Mapping[str, Part]
) -> mpmath.mpf:
    nodes = list(topology.nodes())
    held = topology.gain in ("voltage", "transconductance")
    branches: list[tuple[str, str, str, float | mpmath.mpc]] = [
        (element.name, *element.between, ohms[element.name]) for element in topology.elements
    ]
    part_of = {a.name: parts if isinstance(parts, Part) else parts[a.name] for a in topology.amplifiers}
    branches += [(f"r_id {a.name}", a.plus, a.minus, part_of[a.name].r_id) for a in topology.amplifiers]
    for a in topology.amplifiers:
        common = (("r_icp", a.plus, part_of[a.name].r_icp), ("r_icn", a.minus, part_of[a.name].r_icn))
        branches += [(f"{figure} {a.name}", pin, GROUND, ohm) for figure, pin, ohm in common if ohm != OPEN]
    sources = list(topology.input)
    names = [
        *(("v", node) for node in nodes),
        *(("i", name) for name, *_ in branches),
        *(("i", f"out {a.name}") for a in topology.amplifiers),
        *(("i", f"source {node}") for node in sources),
    ]
    column = {name: index for index, name in enumerate(names)}
    matrix = mpmath.zeros(len(names), len(names))
    right = mpmath.zeros(len(names), 1)
    row_of = {node: index for index, node in enumerate(nodes)}

    def voltage(row: int, node: str, factor: mpmath.mpf) -> None:
        if node != GROUND:
            matrix[row, column["v", node]] += factor

    def flows(name: str, start: str, end: str) -> None:
        """The branch current leaves `start` and enters `end`."""
        if start != GROUND:
            matrix[row_of[start], column["i", name]] += 1
        if end != GROUND:
            matrix[row_of[end], column["i", name]] -= 1

    row = len(nodes)
    for name, start, end, value in branches:
        flows(name, start, end)
        if value == OPEN:
            matrix[row, column["i", name]] = mpmath.mpf(1)
        else:
            voltage(row, start, mpmath.mpf(1))
            voltage(row, end, mpmath.mpf(-1))
            matrix[row, column["i", name]] -= mpmath.mpmathify(value)
        row += 1
    for amplifier in topology.amplifiers:
        part = part_of[amplifier.name]
        flows(f"out {amplifier.name}", GROUND, amplifier.out)
        # A common mode of 1 V comes to the output as a difference of 1 V would, CMRR times smaller.
        of_common = 1 / (2 * mpmath.mpmathify(part.cmrr))
        if part.a_ol == OPEN:
            voltage(row, amplifier.plus, 1 + of_common)
            voltage(row, amplifier.minus, of_common - 1)
        else:
            a_ol = mpmath.mpmathify(part.a_ol)
            voltage(row, amplifier.out, mpmath.mpf(1))
            matrix[row, column["i", f"out {amplifier.name}"]] += mpmath.mpf(part.r_o)
            voltage(row, amplifier.plus, -a_ol * (1 + of_common))
            voltage(row, amplifier.minus, a_ol * (1 - of_common))
        row += 1
    drive = [mpmath.mpf(1)] if len(sources) == 1 else [mpmath.mpf(1) / 2, mpmath.mpf(-1) / 2]
    if not held and len(sources) == 2:
        drive = [mpmath.mpf(1), mpmath.mpf(-1)]
    for node, value in zip(sources, drive, strict=True):
        flows(f"source {node}", GROUND, node)
        if held:
            voltage(row, node, mpmath.mpf(1))
        else:
            matrix[row, column["i", f"source {node}"]] = mpmath.mpf(1)
        right[row] = value
        row += 1
    solution = mpmath.lu_solve(matrix, right)
    if topology.gain in ("transconductance", "current"):
        return solution[column["i", topology.output]]
    return solution[column["v", topology.output]]


def impedances(topology: Topology, values: Mapping[str, float], hertz: float) -> dict[str, float | mpmath.mpc]:
    """Complex impedances [ohm] of elements in ohm, farad and henry; what is open or short stays so."""
    with mpmath.workdps(DIGITS):
        s = mpmath.mpc(0, 2 * mpmath.pi * mpmath.mpf(hertz))
        found: dict[str, float | mpmath.mpc] = {}
        for element in topology.elements:
            value = values[element.name]
            if element.kind == "capacitor":
                found[element.name] = OPEN if value == 0.0 else 0.0 if value == OPEN else 1 / (s * mpmath.mpf(value))
            elif element.kind == "inductor" and value != OPEN:
                found[element.name] = s * mpmath.mpf(value)
            else:
                found[element.name] = value
        return found


def part_at(hertz: float, a_ol: float, r_id: float, r_o: float, gbw: float, second_pole: float = OPEN) -> Part:
    """A part at a frequency: 1/A = (1/A_OL + j f/GBW)(1 + j f/f2)."""
    with mpmath.workdps(DIGITS):
        f = mpmath.mpf(hertz)
        inverse = mpmath.mpc(1 / mpmath.mpf(a_ol), f / mpmath.mpf(gbw)) * mpmath.mpc(1, f / mpmath.mpf(second_pole))
        return Part(1 / inverse if inverse else OPEN, r_id, r_o)


def gains(
    topology: Topology, ohms: Mapping[str, NDArray[np.float64]], parts: Sequence[Sequence[NDArray[np.float64]]]
) -> NDArray[np.float64]:
    """Gains of many stages in double precision: a plain nodal solve, one matrix for each stage.

    Parameters
    ----------
    ohms : mapping
        Resistances, each of shape (cases,); an element that is 0 everywhere joins its nodes into one.
    parts : sequence
        For each amplifier a_ol, r_id, r_o and, unless they are infinite, the other figures of `Part` in its order, each
        of shape (cases,).
    """
    alias: dict[str, str] = {}

    def node(name: str) -> str:
        while name in alias:
            name = alias[name]
        return name

    for element in topology.elements:
        if not np.any(ohms[element.name]):
            first, second = (node(name) for name in element.between)
            alias[first if first not in (GROUND, *topology.input) else second] = (
                second if first not in (GROUND, *topology.input) else first
            )
    held = topology.gain in ("voltage", "transconductance")
    sources = topology.input if len(topology.input) == 1 else topology.input[:2]
    drive = dict(zip(sources, (1.0,) if len(sources) == 1 else (0.5, -0.5), strict=True))
    known = {GROUND: 0.0} | (drive if held else {})
    names = dict.fromkeys(node(name) for name in topology.nodes())
    unknown = [name for name in names if name not in known]
    place = {name: index for index, name in enumerate(unknown)}
    cases, size = len(parts[0][0]), len(unknown) + len(topology.amplifiers)
    matrix, right = np.zeros((cases, size, size)), np.zeros((cases, size, 1))

    def add_voltage(row: int, name: str, factor: NDArray[np.float64] | float) -> None:
        if name in place:
            matrix[:, row, place[name]] += factor
        else:
            right[:, row, 0] -= factor * known[name]

    with np.errstate(divide="ignore"):
        branches = [
            (node(element.between[0]), node(element.between[1]), 1.0 / ohms[element.name])
            for element in topology.elements
            if np.any(ohms[element.name])
        ]
        for amplifier, (_, r_id, _, *more) in zip(topology.amplifiers, parts, strict=True):
            branches.append((node(amplifier.plus), node(amplifier.minus), 1.0 / r_id))
            for pin, r_ic in zip((amplifier.plus, amplifier.minus), more, strict=False):
                branches.append((node(pin), GROUND, 1.0 / r_ic))
    for first, second, siemens in branches:
        for here, there in ((first, second), (second, first)):
            if here in place:
                add_voltage(place[here], here, siemens)
                add_voltage(place[here], there, -siemens)
    for index, (amplifier, (a_ol, _, r_o, *more)) in enumerate(zip(topology.amplifiers, parts, strict=True)):
        row, slope = len(unknown) + index, 1.0 / a_ol
        of_common = 0.5 / more[2] if len(more) > 2 else 0.0
        matrix[:, place[node(amplifier.out)], row] -= 1.0
        add_voltage(row, node(amplifier.plus), 1.0 + of_common)
        add_voltage(row, node(amplifier.minus), of_common - 1.0)
        add_voltage(row, node(amplifier.out), -slope)
        matrix[:, row, row] -= slope * r_o
    if not held:
        for name, value in drive.items():
            right[:, place[node(name)], 0] += value
    solved = np.linalg.solve(matrix, right)[:, :, 0]

    def voltage(name: str) -> NDArray[np.float64]:
        return np.asarray(solved[:, place[name]] if name in place else np.full(cases, known[name]), np.float64)

    if topology.gain in ("transconductance", "current"):
        first, second = (node(name) for name in topology.element(topology.output).between)
        return np.asarray((voltage(first) - voltage(second)) / ohms[topology.output])
    return voltage(node(topology.output))


def random_ohms(topology: Topology, rng: random.Random, low: float = 1.0, high: float = 1e8) -> dict[str, float]:
    """Resistances at 0 Hz, evenly spread over the decades; one optional element in four is left out."""
    at_dc = {"capacitor": OPEN, "inductor": 0.0}
    blank = {"open": OPEN, "short": 0.0}
    found = {}
    for element in topology.elements:
        value = 10.0 ** rng.uniform(np.log10(low), np.log10(high))
        left_out = rng.random() < 0.25
        if element.absent != "error" and left_out:
            value = blank[element.absent]
        found[element.name] = at_dc.get(element.kind, value)
    return found


def random_values(topology: Topology, rng: random.Random, hertz: float) -> dict[str, float]:
    """Elements in ohm, farad and henry whose impedances at a frequency are spread over the decades; some left out."""
    blank = {"open": {"capacitor": 0.0}, "short": {"capacitor": OPEN, "resistor": 0.0, "inductor": 0.0}}
    found = {}
    for element in topology.elements:
        ohms, omega = 10.0 ** rng.uniform(2, 6), 2.0 * np.pi * hertz
        value = {"resistor": ohms, "capacitor": 1.0 / (omega * ohms), "inductor": ohms / omega}[element.kind]
        left_out = rng.random() < 0.25
        if element.absent != "error" and left_out:
            value = blank[element.absent].get(element.kind, OPEN)
        found[element.name] = float(value)
    return found


def random_part(rng: random.Random) -> Part:
    """A part over the whole range that the screen is meant for."""
    return Part(10.0 ** rng.uniform(2, 9), 10.0 ** rng.uniform(3, 14), 10.0 ** rng.uniform(-2, 4))


def random_common_mode(rng: random.Random, part: Part) -> Part:
    """The same part with all that its common mode does to it, over the whole range."""
    r_icp, r_icn = (10.0 ** rng.uniform(4, 14) for _ in range(2))
    return replace(part, r_icp=r_icp, r_icn=r_icn, cmrr=rng.choice([1.0, -1.0]) * 10.0 ** rng.uniform(1, 8))


def network(
    elements: Mapping[str, tuple[str, str]],
    amplifiers: Sequence[tuple[str, str, str]],
    source: tuple[str, ...] = ("in",),
    output: str = "out",
    gain: str = "voltage",
) -> Topology:
    """A topology built in a test: resistors by name, amplifiers as (plus, minus, out)."""
    return Topology(
        name="under_test",
        summary="A network of a test",
        known_as=(),
        gain=gain,
        input=source,
        output=output,
        elements=tuple(Element(name, "resistor", between, "error") for name, between in elements.items()),
        amplifiers=tuple(Amplifier(f"u{i}", *nodes) for i, nodes in enumerate(amplifiers, start=1)),
        source="a test",
    )
