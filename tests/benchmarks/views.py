"""Cost of root-sum-square and Monte Carlo beside that of the screen, for each topology of one amplifier.

    python tests/benchmarks/views.py [STAGES PARTS [SAMPLES]]

Prints, from one run on one thread, nanoseconds a pair of the screen, of root-sum-square, and of Monte Carlo if every
pair is sampled (a run samples those alone whose worst case is not inside the limit), and the last two over the first.
What is done once for each stage and each part is counted in. The stages and parts are those of `worst_case.py`.
"""

from __future__ import annotations

import sys

import numpy as np
from worst_case import parts_of, seconds, stages_of  # type: ignore[import-not-found]

from gainassay.forms.form import derive
from gainassay.forms.library import library
from gainassay.screen import kernel, monte_carlo, rss
from gainassay.screen.corners import active_sets, stage_side
from gainassay.screen.monte_carlo import Lot
from gainassay.screen.signs import reach


def names(count: int) -> np.ndarray:
    """Made-up names."""
    return np.array([f"name-{place}" for place in range(count)])


def main() -> None:
    """Measure and print."""
    stages, parts, samples = ([int(argument) for argument in sys.argv[1:]] + [100, 500, 2_000][len(sys.argv) - 1 :])[:3]
    print(f"{stages} stages x {parts} parts of each topology, {samples} samples; ns a pair on one thread")
    print(f"{'topology':26} {'screen':>8} {'rss':>8} {'monte carlo':>12} {'ratios':>14}")
    ratios = []
    for topology in library().values():
        if len(topology.amplifiers) > 1:
            continue
        form, box = derive(topology), stages_of(topology, stages)
        part, limits = parts_of(form, parts)
        reached, sets = reach(form, limits), active_sets(form)
        side = stage_side(form, box, reached)
        if not side.regular.any():
            continue
        lot = Lot(form, box, names(stages), names(parts), limits)
        every = np.repeat(side.regular[:, None], parts, axis=1)

        def screened(form=form, box=box, reached=reached, part=part, sets=sets) -> None:  # type: ignore[no-untyped-def]
            kernel.screen(stage_side(form, box, reached), part, sets)

        times = [
            seconds(screened),
            seconds(lambda lot=lot: rss.estimates(lot.form, lot.box, lot.limits)),
            seconds(lambda lot=lot, every=every: monte_carlo.inside(lot, every, samples)),
        ]
        each = [time / (stages * parts) * 1e9 for time in times]
        ratios.append((each[1] / each[0], each[2] / each[0]))
        shown = f"{each[0]:8.0f} {each[1]:8.0f} {each[2]:12.0f} {ratios[-1][0]:7.1f} {ratios[-1][1]:6.0f}"
        print(f"{topology.name:26} {shown}")
    print(f"{'mean ratio':26} {'':8} {'':8} {'':12} {np.mean(ratios, axis=0).round(1)}")


if __name__ == "__main__":
    main()
