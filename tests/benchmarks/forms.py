"""Time and size of the formulas of every built-in topology, and of stages with bridges and several amplifiers.

    python tests/benchmarks/forms.py

Prints, from one run on one machine, for each topology: elements, amplifiers, terms of numerator and denominator of
the gain; milliseconds for the determinants, for the gain's formula with its proof, and for all formulas; and the
length of the gain's formula in quantities and numbers. Import of sympy is timed apart.
"""

from __future__ import annotations

import sys
from pathlib import Path
from time import perf_counter

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
import oracle
from gainassay.forms import meaningful, nodal
from gainassay.forms.expression import length
from gainassay.forms.library import library
from gainassay.forms.topology import Topology

MORE = {
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
    "current pump": oracle.network(
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
    "composite": oracle.network(
        {"r1": ("a", "ground"), "r2": ("a", "out"), "r3": ("b", "ground"), "r4": ("b", "out")},
        [("in", "a", "mid"), ("mid", "b", "out")],
    ),
    "instrumentation, 2": oracle.network(
        {"r1": ("ground", "a"), "r2": ("a", "mid"), "r3": ("mid", "b"), "r4": ("b", "out"), "r_g": ("a", "b")},
        [("in_n", "a", "mid"), ("in_p", "b", "out")],
        source=("in_p", "in_n"),
    ),
    "instrumentation, 3": oracle.network(
        {
            "r_g": ("a", "b"),
            "r1": ("a", "c"),
            "r2": ("b", "d"),
            "r3": ("d", "minus"),
            "r4": ("minus", "out"),
            "r5": ("c", "plus"),
            "r6": ("plus", "ground"),
            "r_load": ("out", "ground"),
        },
        [("in_p", "a", "c"), ("in_n", "b", "d"), ("plus", "minus", "out")],
        source=("in_p", "in_n"),
    ),
}


def main() -> None:
    """Print the table."""
    start = perf_counter()
    import sympy.polys.rings  # noqa: F401

    print(f"import of sympy: {1e3 * (perf_counter() - start):.0f} ms")
    print(f"{'topology':24}{'elements':>9}{'amps':>5}{'N':>6}{'D':>6}{'nodal':>8}{'gain':>8}{'all':>8}{'length':>8}")
    total = 0.0
    for name, topology in {**library(), **MORE}.items():
        total += _row(name, topology)
    print(f"all: {total / 1e3:.1f} s")


def _row(name: str, topology: Topology) -> float:
    start = perf_counter()
    gain = nodal.derive(topology)
    determinants = perf_counter()
    formula = meaningful.gain_formula(gain, meaningful.quantities(topology))
    written = perf_counter()
    meaningful.derive(topology)
    done = perf_counter()
    spans = [1e3 * (end - begin) for begin, end in ((start, determinants), (determinants, written), (written, done))]
    print(
        f"{name:24}{len(topology.elements):9}{len(topology.amplifiers):5}{len(gain.numerator.terms):6}"
        f"{len(gain.denominator.terms):6}{spans[0]:8.1f}{spans[1]:8.1f}{spans[2]:8.1f}{length(formula.whole):8}"
    )
    return spans[2]


if __name__ == "__main__":
    main()
