"""Cost of rows at a frequency beside the same rows at 0 Hz, for each topology.

    python tests/benchmarks/at_frequency.py [STAGES PARTS]

Prints nanoseconds a pair for a chunk, verdicts and all, on one thread, corners of both, and their ratio. Elements have
tolerances of 0.1 %, half of the optional ones are absent. All data is made up here, from a fixed seed.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from time import perf_counter

import numpy as np

from gainassay.contracts.signals import Signals
from gainassay.forms.cache import duty_of
from gainassay.forms.departures import AT_DC, FIGURES
from gainassay.forms.form import Form, derive
from gainassay.forms.library import library
from gainassay.forms.topology import Topology
from gainassay.screen import at_frequency, blocks, limits
from gainassay.screen.blocks import Chunk, Group
from gainassay.screen.boxes import StageBox, with_tolerances
from gainassay.screen.corners import PartSide, part_side
from gainassay.screen.verdicts import Rules
from gainassay.tables.operating import OF_PARTS, OF_STAGES

REPEATS = 3
HERTZ = 1e3
BLANK = {"capacitor": {"open": 0.0, "short": np.inf}, "": {"open": np.inf, "short": 0.0}}


def stages_of(topology: Topology, count: int) -> StageBox:
    """Stages of 1 kohm to 316 kohm, capacitors and inductors alike at the frequency."""
    rng = np.random.default_rng(7)
    values = 10.0 ** rng.uniform(3, 5.5, (len(topology.elements), count))
    for row, element in zip(values, topology.elements, strict=True):
        omega = 2.0 * np.pi * HERTZ
        if element.kind != "resistor":
            row[:] = 1.0 / (omega * row) if element.kind == "capacitor" else row / omega
        if element.absent != "error":
            blank = BLANK.get(element.kind, BLANK[""])[element.absent]
            row[rng.random(count) < 0.5] = blank
    tolerances = np.where(np.isfinite(values) & (values > 0.0), 1e-3, 0.0)
    return with_tolerances(values, tolerances, np.full(count, 1e-3), np.full(count, np.nan))


def group(topology: Topology, form: Form, box: StageBox, side: PartSide) -> Group:
    """All stages with all parts, of whose operating limits nothing is known."""
    stages, parts = len(box.limits), side.worst.shape[1]
    names = (np.array([f"s{i:05d}" for i in range(stages)]), box), (np.array([f"p{i:05d}" for i in range(parts)]), side)
    everything = np.zeros(stages, np.intp), np.ones((1, parts), dtype=bool)
    blank = {name: np.full(stages, np.nan) for name in OF_STAGES}
    asked = limits.conditions(form, duty_of(topology), box.values, blank)
    return blocks.group(form, *names, everything, limits.bounds(asked, dict.fromkeys(OF_PARTS, np.full(parts, np.nan))))


def measured(one: Group) -> tuple[float, float]:
    """Nanoseconds a pair, and corners a stage."""
    shape = len(one.stage_names), len(one.part_names)
    times = []
    for _ in range(REPEATS):
        start = perf_counter()
        found = blocks.screen_chunk((one,), Chunk(0, slice(0, shape[0]), slice(0, shape[1])), Rules())
        times.append(perf_counter() - start)
    corners = sum(len(plan.corners) * len(plan.stages) for plan in found.stage_side.plans) / shape[0]
    return min(times) / (shape[0] * shape[1]) * 1e9, corners


def main() -> None:
    """Measure and print."""
    stages, parts = (int(argument) for argument in sys.argv[1:3]) if len(sys.argv) > 2 else (200, 5_000)
    print(f"{stages} stages x {parts} parts of each topology; ns a pair on one thread, least of {REPEATS}")
    print(f"{'topology':26} {'at 0 Hz':>9} {'corners':>8} {'at 1 kHz':>9} {'corners':>8} {'ratio':>6}")
    rng = np.random.default_rng(5)
    a, g = 10.0 ** -rng.uniform(3.5, 6.5, parts), 10.0 ** -rng.uniform(5, 10, parts)
    r_o, b = 10.0 ** rng.uniform(0.5, 3, parts), 10.0 ** -rng.uniform(5.5, 8, parts)
    known = {"a_ol": a, "r_id": g, "r_o": r_o, "gbw": b}
    worst = np.array([known.get(figure.quantity, np.zeros(parts)) for figure in FIGURES])
    ratios = []
    for topology in library().values():
        form, box, evidence = derive(topology), stages_of(topology, stages), np.zeros((len(FIGURES), parts), np.uint8)
        dc_side = part_side(form, worst[AT_DC] / 3.0, worst[AT_DC], evidence[AT_DC])
        dc, dc_corners = measured(group(topology, form, box, dc_side))
        signals = Signals(np.full((1, stages), HERTZ), np.zeros(stages, dtype=bool), np.full(stages, np.inf))
        tuned = at_frequency.part_side(worst / 3.0, worst, np.zeros((2, parts)), evidence)
        hertz, corners = measured(group(topology, form, replace(box, signals=signals), tuned))
        ratios.append(hertz / dc)
        print(
            f"{topology.name:26} {dc:9.1f} {dc_corners:8.1f} {hertz:9.1f} {corners:8.1f} {ratios[-1]:6.2f}", flush=True
        )
    print(f"median ratio {np.median(ratios):.2f}")


if __name__ == "__main__":
    main()
