"""Cost of the exact worst case, beside that of the nominal figures, for each topology of one amplifier.

    python tests/benchmarks/worst_case.py [STAGES PARTS]

Prints, from one run on one thread: corners a pair (least, mean, most over the stages) and how many there are in all;
nanoseconds a pair for the error at the nominal figures alone, for the largest error over the box, and for this with its
dominant term; and both over the first. What is done once for each stage (signs, coefficient functions) is counted in,
nominal ones with the nominal error, the rest with the worst case. All data is made up here, from a fixed seed.
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from time import perf_counter

import numpy as np

from gainassay.forms import coefficients
from gainassay.forms.form import Form, derive
from gainassay.forms.library import library
from gainassay.forms.topology import Topology
from gainassay.screen import kernel
from gainassay.screen.boxes import StageBox, with_tolerances
from gainassay.screen.corners import PartSide, StageSide, active_sets, part_side, stage_side
from gainassay.screen.signs import reach

REPEATS = 3


def stages_of(topology: Topology, count: int) -> StageBox:
    """Stages with 0.1 % resistors of 1 kohm to 316 kohm; half of the optional elements are absent."""
    rng = np.random.default_rng(7)
    values = 10.0 ** rng.uniform(3, 5.5, (len(topology.elements), count))
    for row, element in zip(values, topology.elements, strict=True):
        if element.absent != "error":
            row[rng.random(count) < 0.5] = {"open": np.inf, "short": 0.0}[element.absent]
    tolerances = np.where(np.isfinite(values) & (values > 0.0), 1e-3, 0.0)
    return with_tolerances(values, tolerances, np.full(count, 1e-3), np.full(count, np.nan))


def parts_of(form: Form, count: int) -> tuple[PartSide, np.ndarray]:
    """Parts from 70 dB to 130 dB of open-loop gain, r_id from 100 kohm, r_o up to 1 kohm."""
    rng = np.random.default_rng(5)
    limits = np.array(
        [10.0 ** -rng.uniform(3.5, 6.5, count), 10.0 ** -rng.uniform(5, 10, count), 10.0 ** rng.uniform(0.5, 3, count)]
    )
    return part_side(form, limits / 3.0, limits, np.zeros(limits.shape, np.uint8)), limits


def corners(side: StageSide) -> np.ndarray:
    """Corners that each stage visits."""
    found = np.zeros(len(side.limits), np.intp)
    for plan in side.plans:
        found[plan.stages] = len(plan.corners)
    return found


def seconds(work: Callable[[], object]) -> float:
    """The least of some repetitions."""
    found = []
    for _ in range(REPEATS):
        start = perf_counter()
        work()
        found.append(perf_counter() - start)
    return min(found)


def main() -> None:
    """Measure and print."""
    stages, parts = (int(argument) for argument in sys.argv[1:3]) if len(sys.argv) > 2 else (200, 5_000)
    print(f"{stages} stages x {parts} parts of each topology; ns a pair on one thread, least of {REPEATS}")
    print(f"{'topology':26} {'corners':>14} {'of':>7} {'nominal':>8} {'worst':>7} {'+ term':>7} {'ratios':>11}")
    ratios = []
    for topology in library().values():
        if len(topology.amplifiers) > 1:
            continue
        form, box = derive(topology), stages_of(topology, stages)
        sets = active_sets(form)
        part, limits = parts_of(form, parts)
        reached = reach(form, limits)
        side, whole = stage_side(form, box, reached), corners(stage_side(form, box))
        if not side.regular.any():
            print(f"{topology.name:26} has no ideal gain at 0 Hz")
            continue
        shape = (stages, parts)

        def nominal(form: Form = form, box: StageBox = box, side: StageSide = side, part: PartSide = part) -> None:
            coefficients.evaluate(form, coefficients.at_dc(form, box.values))
            kernel.nominal_errors(side, part)

        prepare = seconds(lambda form=form, box=box, reached=reached: stage_side(form, box, reached))  # type: ignore[misc]
        times = [
            seconds(nominal),
            prepare + seconds(lambda side=side, part=part, sets=sets: kernel.worst_errors(side, part, sets)),  # type: ignore[misc]
            prepare + seconds(lambda side=side, part=part, sets=sets: kernel.screen(side, part, sets)),  # type: ignore[misc]
        ]
        each = [time / (shape[0] * shape[1]) * 1e9 for time in times]
        count = corners(side)
        ratios.append((each[1] / each[0], each[2] / each[0]))
        print(
            f"{topology.name:26} {count.min():4d} {count.mean():5.1f} {count.max():3d} {whole.mean():7.1f}"
            f" {each[0]:8.1f} {each[1]:7.1f} {each[2]:7.1f} {ratios[-1][0]:5.2f} {ratios[-1][1]:5.2f}"
        )
    print(f"{'mean ratio':26} {'':14} {'':7} {'':8} {'':7} {'':7} {np.mean(ratios, axis=0).round(2)}")


if __name__ == "__main__":
    main()
