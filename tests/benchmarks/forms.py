"""Time and size of the formulas of every built-in topology, before and after they are kept.

    python tests/benchmarks/forms.py

Prints, from one run on one machine, for each topology: elements, amplifiers, terms of numerator and denominator of
the gain; milliseconds for the determinants, for the gain's formula with its proof, for all formulas, and for reading
them back from the cache; and the length of the gain's formula. Import of sympy is timed apart.
"""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable
from time import perf_counter
from typing import Any

from gainassay.forms import cache, meaningful, nodal
from gainassay.forms.expression import length
from gainassay.forms.library import library
from gainassay.forms.topology import Topology

HEADER = ("topology", "elements", "amps", "N", "D", "nodal", "gain", "all", "kept", "length")


def main() -> None:
    """Print the table."""
    start = perf_counter()
    import sympy.polys.rings  # noqa: F401

    print(f"import of sympy: {1e3 * (perf_counter() - start):.0f} ms")
    print(f"{HEADER[0]:26}" + "".join(f"{name:>9}" for name in HEADER[1:]))
    total = 0.0
    with tempfile.TemporaryDirectory() as folder:
        os.environ["GAINASSAY_CACHE"] = folder
        for name, topology in library().items():
            total += _row(name, topology)
    print(f"all formulas of all topologies: {total / 1e3:.1f} s")


def _row(name: str, topology: Topology) -> float:
    gain, nodal_ms = _timed(lambda: nodal.derive(topology))
    formula, gain_ms = _timed(lambda: meaningful.gain_formula(gain, meaningful.quantities(topology)))
    _, all_ms = _timed(lambda: meaningful.derive(topology))
    cache.formulas_of(topology)
    _, kept_ms = _timed(lambda: cache.formulas_of(topology))
    sizes = [len(topology.elements), len(topology.amplifiers), len(gain.numerator.terms), len(gain.denominator.terms)]
    spans = [nodal_ms, gain_ms, all_ms, kept_ms]
    cells = [*(f"{size:9}" for size in sizes), *(f"{span:9.1f}" for span in spans), f"{length(formula.whole):9}"]
    print(f"{name:26}{''.join(cells)}")
    return all_ms


def _timed(work: Callable[[], Any]) -> tuple[Any, float]:
    """What some work gives, and the milliseconds it took."""
    start = perf_counter()
    found = work()
    return found, 1e3 * (perf_counter() - start)


if __name__ == "__main__":
    main()
