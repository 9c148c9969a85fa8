"""Writes the tables of the river gauging sample set: `python sample_sets/river_gauging/generate.py [FOLDER]`.

Everything here is invented: the maker of gauging stations, its stages and every part. The distributions are
shaped after what such tables look like in general, not after anybody's data:

- A station is built from subsystems; each channel of a subsystem has the same few stages, at its own values.
- The stages are of every built-in topology that has a gain at 0 Hz. Capacitors and inductors count for nothing
  there, so theirs are any usual values, without a tolerance.
- Resistors are preferred values of IEC 60063. The wanted gain is a round number, the resistors come as near
  to it as the series allows, and only some rows say the wanted gain, so some have a set-point error.
- The required accuracy of most stages is what the resistors spend already and some room for the op-amp,
  rounded up to two digits. A few stages are hopeless (the resistors alone spend more) and a few trivial.
- Limits of parts spread over decades within a family and cluster in its middle, and are rounded to the
  figures that data sheets print. About half of the data sheets limit everything; the others leave blanks.
- Some rows are faulty, as in any table that people keep by hand; `FAULTY_STAGES`, `FAULTY_PARTS` and the two
  `REPEATED_...` list them.

Only `random()` of a seeded `random.Random` is drawn from, whose sequence Python keeps over its versions.
"""

from __future__ import annotations

import csv
import math
import sys
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import product
from pathlib import Path
from random import Random
from typing import TypeVar

T = TypeVar("T")

SEED_STAGES = 20_407
SEED_PARTS = 70_211
PARTS = 800

STAGE_COLUMNS = (
    *("stage", "topology", "r_source", "r_source_n", "r_source_p", "r_shunt", "r1", "r2", "r3", "r4", "r5", "r6"),
    *("r_f", "r_gain", "r_mid", "r_iso", "r_load", "c1", "c2", "c_source", "c_load", "l1"),
    *("accuracy_pct", "accuracy_ppm", "target_gain", "tol_pct"),
    *("r_source_tol_pct", "r1_tol_pct", "r2_tol_pct", "r3_tol_pct", "r4_tol_pct", "r_gain_tol_pct", "r_load_tol_pct"),
)
PART_COLUMNS = (
    *("part", "family", "a_ol_min", "a_ol_typ", "a_ol_db_min", "a_ol_db_typ"),
    *("r_id_min", "r_id_typ", "r_o_typ", "r_o_max"),
)

E24 = tuple(10 * n for n in (10, 11, 12, 13, 15, 16, 18, 20, 22, 24, 27, 30)) + tuple(
    10 * n for n in (33, 36, 39, 43, 47, 51, 56, 62, 68, 75, 82, 91)
)
E96 = tuple(round(100 * 10 ** (step / 96)) for step in range(96))
PREFERRED = tuple(sorted({*E24, *E96}))
"""Significant digits of the preferred values, 100 to 976."""

# ---------------------------------------------------------------------------------------------- stages

Range = tuple[float, float]


@dataclass(frozen=True)
class Role:
    """A stage that each channel of a subsystem has.

    Attributes
    ----------
    name : str
        What follows the channel in the stage's name, its separator included.
    topologies : tuple[str, ...]
        One row for each, all of the same circuit: a summer has a row for each input.
    gains : tuple[float, ...]
        Wanted gains, in magnitude; of a transimpedance stage in V/A, of a current source in A/V.
    base : Range
        Between which values r1 lies, or what `DESIGNS` calls the base (0: the stage has none) [ohm].
    room : Range
        What the required accuracy leaves for the op-amp, from and to [ppm].
    tolerances : tuple[str, ...]
        tol_pct of the resistors.
    sources, loads, shunts : tuple[float, ...]
        Values of the source, load and shunt resistors; 0: left blank [ohm].
    toleranced : tuple[str, ...]
        The only elements with a tolerance; none named: all resistors.
    reactive : Mapping[str, tuple[str, ...]]
        Values of each capacitor and inductor as the table writes them; empty: left blank [F, H].
    """

    name: str
    topologies: tuple[str, ...]
    gains: tuple[float, ...]
    base: Range
    room: Range
    tolerances: tuple[str, ...]
    sources: tuple[float, ...] = (0,)
    loads: tuple[float, ...] = (0,)
    shunts: tuple[float, ...] = (0,)
    toleranced: tuple[str, ...] = ()
    reactive: Mapping[str, tuple[str, ...]] = field(default_factory=dict)


COARSE = ("1", "1", "0.5", "0.1")
USUAL = ("0.1", "0.1", "0.05", "0.5", "0.25")
FINE = ("0.01", "0.02", "0.02", "0.05", "0", "")
TRIMMED = ("0", "", "0.01", "0.01")
MATCHED = ("0.01", "0.02", "0.05")

SUM_OF_TWO = ("summing_2_in1", "summing_2_in2")
SUM_OF_THREE = ("summing_3_in1", "summing_3_in2", "summing_3_in3")
SUM_NOT_INVERTED = ("summing_non_inverting_in1", "summing_non_inverting_in2")

PICOFARADS = ("4p7", "10p", "22p", "47p")
NANOFARADS = ("1n", "2n2", "4n7", "10n")
MICROFARADS = ("100n", "220n", "470n", "1u")

SUBSYSTEMS: tuple[tuple[str, int, tuple[Role, ...]], ...] = (
    # Pressure bridges at the river bed: small signals, so high gains and fine resistors.
    ("level", 12, (
        Role(" bridge amplifier", ("difference",), (20, 40, 50, 100), (1e3, 1e4), (50, 2000), FINE,
             sources=(0, 0, 180, 348, 499)),
        Role("-gain", ("non_inverting",), (2, 4, 5, 10, 20), (1e3, 1e4), (7, 400), USUAL,
             sources=(0, 1e3, 1e4), loads=(0, 1e4, 2e3)),
        Role(" buffer", ("follower",), (1,), (0, 0), (4, 90), ("",),
             sources=(0, 1e3, 1e5), loads=(0, 1e4, 2e3)),
    )),
    # Electrodes in the water are sources of high resistance: here the input resistance counts.
    ("flow", 10, (
        Role(" electrode amplifier", ("non_inverting_source",), (5, 10, 20, 50), (1e3, 2e4), (40, 2000),
             TRIMMED, sources=(1e5, 4.7e5, 1e6, 2.2e6), shunts=(0, 0, 0, 1e9)),
        Role("-gain", ("inverting",), (1, 2, 5, 10, 25), (2e3, 2e4), (10, 400), USUAL,
             loads=(0, 2e3, 1e4)),
        Role(" path sum", SUM_OF_TWO, (0.5, 1, 2), (1e4, 1e5), (10, 300), USUAL, loads=(0, 1e4)),
    )),
    # Cells of a few hundred ohm: here the output resistance counts.
    ("conductivity", 8, (
        Role(" cell driver", ("follower",), (1,), (0, 0), (5, 400), ("",),
             sources=(0, 1e3), loads=(51, 100, 150, 330)),
        Role(" current converter", ("transimpedance",), (100, 330, 1e3, 4.7e3), (0, 0), (7, 400), FINE,
             sources=(51, 100, 330, 1e3), loads=(0, 2e3)),
        Role("-range", ("inverting_t",), (20, 50, 100), (1e4, 1e5), (50, 2000), USUAL, loads=(0, 1e4)),
    )),
    ("temperature", 10, (
        Role(" sensor amplifier", ("non_inverting_source",), (5, 10, 20), (1e3, 1e4), (10, 400), USUAL,
             sources=(100, 1e3, 1e4), shunts=(0, 1e5, 1e6)),
        Role("-span", ("inverting",), (1, 2, 4, 10), (5e3, 5e4), (10, 300), COARSE, sources=(0, 0, 51, 100)),
    )),
    # Light detectors are current sources behind many megohm.
    ("turbidity", 8, (
        Role(" light detector", ("transimpedance",), (1e6, 2.2e6, 4.7e6, 1e7), (0, 0), (5, 300), TRIMMED,
             sources=(0, 1e8, 1e7)),
        Role(" scatter gain", ("inverting_t",), (50, 100, 200), (1e5, 1e6), (100, 3000), USUAL),
    )),
    # Dividers that may not drain the battery, and a shunt that may not warm up.
    ("battery", 8, (
        Role(" voltage scaler", ("inverting",), (0.1, 0.2, 0.25, 0.5), (1e6, 9e6), (6, 300), COARSE),
        Role(" charge current", ("difference",), (20, 50, 100), (5e2, 2e3), (60, 2000), USUAL),
    )),
    ("rain", 6, (
        Role(" weight amplifier", ("difference",), (50, 100, 200), (1e3, 5e3), (100, 3000), FINE,
             sources=(0, 348, 1e3)),
        Role(" cell sum", SUM_OF_THREE, (0.33, 0.5, 1), (1e4, 3e5), (10, 300), USUAL),
    )),
    ("telemetry", 8, (
        Role(" line driver", ("non_inverting",), (2, 2.5, 5), (2e2, 1e3), (20, 1000), USUAL,
             loads=(51, 75, 150, 620)),
        Role(" line receiver", ("difference",), (0.5, 1, 2), (1e4, 1e5), (7, 300), USUAL,
             sources=(0, 51, 75), loads=(0, 2e3)),
    )),
    ("oxygen", 6, (
        Role(" membrane current", ("transimpedance",), (1e5, 4.7e5, 1e6), (0, 0), (4, 200), FINE,
             sources=(0, 1e6, 1e7)),
        Role("-gain", ("non_inverting",), (2, 5, 10), (5e3, 5e4), (7, 300), USUAL, loads=(0, 1e4)),
    )),
    ("acidity", 6, (
        Role(" electrode buffer", ("follower",), (1,), (0, 0), (4, 200), ("",),
             sources=(1e6, 1e7, 4.7e7, 1e8)),
        Role(" electrode amplifier", ("non_inverting_source",), (2, 5, 10), (1e4, 1e5), (20, 900), FINE,
             sources=(1e6, 1e7, 2.2e7)),
    )),
    ("ice", 4, (
        Role(" heater driver", ("inverting",), (1, 2, 5, 10), (1e2, 1e3), (20, 2000), TRIMMED,
             loads=(51, 100, 270)),
        Role(" probe gain", ("inverting",), (20, 50, 100), (1e3, 2e3), (60, 2000), COARSE, sources=(0, 10)),
    )),
    ("gate", 8, (
        Role(" position buffer", ("follower",), (1,), (0, 0), (4, 90), ("",),
             sources=(2e3, 1e4), loads=(0, 620)),
        Role("-trim", ("non_inverting",), (1.1, 1.2, 1.5), (1e4, 1e5), (4, 200), USUAL, loads=(0, 2e3)),
    )),
    # Gauges on piles and sluices. Behind several op-amps few resistors are free: the others are trimmed networks.
    ("strain", 2, (
        Role(" instrumentation", ("instrumentation_3",), (50, 100, 200), (5e3, 2e4), (200, 5000), MATCHED,
             loads=(0, 1e4), toleranced=("r_gain", "r1", "r2")),
        Role(" low-pass", ("low_pass_2",), (1.5, 2, 2.5), (1e4, 5e4), (8, 300), USUAL, loads=(0, 2e3),
             reactive={"c1": MICROFARADS, "c2": MICROFARADS}),
    )),
    ("seepage", 2, (
        Role(" instrumentation", ("instrumentation_2",), (5, 10, 20, 50), (1e4, 5e4), (60, 2000), MATCHED,
             loads=(0, 1e4), toleranced=("r1", "r2", "r3", "r4")),
        Role(" pore pressure", ("difference_filtered",), (10, 20, 50), (1e3, 1e4), (40, 1500), FINE,
             reactive={"c1": NANOFARADS, "c2": NANOFARADS}),
    )),
    # Outputs to the control room, 4 mA to 20 mA. The sources into grounded loads are balanced.
    ("loop", 2, (
        Role(" current output", ("current_pump_improved",), (2e-3, 4e-3, 5e-3), (1e4, 5e4), (40, 900), MATCHED,
             loads=(51, 100, 250)),
        Role(" test current", ("current_pump",), (1e-4, 2e-4, 5e-4), (1e4, 5e4), (2, 60), MATCHED,
             loads=(51, 100, 150)),
        Role(" display current", ("voltage_to_current",), (1e-3, 2e-3, 5e-3), (0, 0), (10, 300), USUAL,
             loads=(100, 250, 499)),
    )),
    # Search coils beside the electrodes, and what drives the field.
    ("flow", 2, (
        Role(" coil current", ("current_amplifier",), (5, 10, 20), (5e1, 2e2), (20, 800), USUAL,
             sources=(0, 1e5, 1e6), loads=(51, 100)),
        Role(" coil", ("inverting_coil",), (10, 20, 50), (3e2, 2e3), (50, 2000), COARSE, loads=(0, 1e4),
             reactive={"l1": ("0.047", "0.15", "0.33"), "c1": ("", "1n", "2n2")}),
    )),
    ("wave", 2, (
        Role(" low-pass", ("low_pass_2_inverting",), (1, 2, 5), (5e3, 5e4), (8, 300), USUAL, loads=(0, 1e4),
             reactive={"c1": MICROFARADS, "c2": NANOFARADS}),
        Role(" mean", ("integrator",), (1, 2, 4, 10), (1e4, 1e5), (10, 300), USUAL, reactive={"c1": MICROFARADS}),
        Role(" phase", ("all_pass",), (1,), (1e4, 5e4), (6, 200), COARSE, loads=(0, 2e3),
             reactive={"c1": NANOFARADS}),
    )),
    ("sediment", 2, (
        Role(" light detector", ("transimpedance_filtered",), (1e6, 2.2e6, 1e7), (0, 0), (5, 300), TRIMMED,
             sources=(0, 1e8, 1e7), reactive={"c_source": ("", *PICOFARADS), "c1": PICOFARADS}),
        Role(" faint light detector", ("transimpedance_t",), (1e7, 2e7, 5e7), (5e5, 2e6), (60, 3000), USUAL,
             sources=(0, 1e8)),
    )),
    # A listening post under water: it hears the gravel move.
    ("bedload", 2, (
        Role(" preamplifier", ("non_inverting_filtered",), (10, 20, 50), (1e3, 1e4), (40, 1500), USUAL,
             sources=(0, 1e4, 1e5), reactive={"c1": PICOFARADS}),
        Role("-gain", ("non_inverting_t",), (20, 50, 100), (1e4, 5e4), (60, 2000), USUAL, loads=(0, 1e4)),
        Role(" filter gain", ("inverting_bridged_t",), (10, 20, 50), (1e4, 1e5), (40, 1500), USUAL),
    )),
    ("siren", 2, (
        Role(" cable driver", ("follower_isolated",), (1,), (2e3, 1e4), (10, 600), COARSE,
             sources=(0, 1e3), loads=(150, 330, 620), reactive={"c1": ("", *PICOFARADS), "c_load": ("", *NANOFARADS)}),
        Role(" tone sum", SUM_NOT_INVERTED, (1, 2), (1e4, 1e5), (10, 300), USUAL, loads=(0, 1e4)),
    )),
    ("reference", 2, (
        Role(" amplifier", ("composite",), (2, 4, 5, 10), (1e3, 1e4), (10, 300), MATCHED,
             sources=(0, 1e3), loads=(0, 150, 620), toleranced=("r1", "r2")),
        Role(" range", ("cascade_inverting",), (100, 200, 400), (2e3, 1e4), (60, 2000), MATCHED,
             loads=(0, 1e4), toleranced=("r1", "r2", "r3", "r4")),
    )),
)  # fmt: skip

HOPELESS = 0.06
"""Share of the stages with tolerances whose resistors alone spend more than the required accuracy."""

TRIVIAL = 0.06
"""Share of the stages that any op-amp keeps."""

REPEATED_STAGE = "temperature-06-span"

FAULTY_STAGES: dict[str, dict[str, str]] = {
    "flow-03-gain": {"r2": "12k3k"},
    "oxygen-04-gain": {"r1": "n/a"},
    "level-09 bridge amplifier": {"topology": "differnce"},
    "ice-02 probe gain": {"r2": ""},
    "level-05-gain": {"accuracy_pct": "0.5", "accuracy_ppm": "5000"},
    "gate-06 position buffer": {"accuracy_pct": "", "accuracy_ppm": ""},
}
"""Cells that make a row faulty: a typing error, no number, no such topology, an element left out, both
accuracies, neither."""


def stages() -> list[dict[str, str]]:
    """The stage table, faulty rows included."""
    rng = Random(SEED_STAGES)  # noqa: S311
    rows = []
    for subsystem, channels, roles in SUBSYSTEMS:
        for channel in range(1, channels + 1):
            for role in roles:
                rows += _circuit(rng, f"{subsystem}-{channel:02d}{role.name}", role)
    for row in rows:
        row.update(FAULTY_STAGES.get(row["stage"], {}))
    # Entered once more with other resistors: nobody can tell which of the two holds.
    rows += [row | {"r1": "10k", "r2": "20k"} for row in rows if row["stage"] == REPEATED_STAGE]
    return rows


def _circuit(rng: Random, name: str, role: Role) -> list[dict[str, str]]:
    """The rows of one circuit: one, or one for each input of a summer."""
    wanted = _pick(rng, role.gains)
    elements = _elements(rng, role, wanted)
    tolerance = _pick(rng, role.tolerances)
    own = _own_tolerances(rng, role, elements, tolerance)
    if role.toleranced:
        tolerance, own = "", dict.fromkeys(role.toleranced, tolerance)
    in_codes = rng.random() < 0.7
    written = {element: _ohm(rng, value, in_codes) for element, value in elements.items()}
    written |= {element: _pick(rng, values) for element, values in role.reactive.items()}
    rows = []
    for topology in role.topologies:
        suffix = f" {topology.rpartition('_')[2]}" if len(role.topologies) > 1 else ""
        row = dict.fromkeys(STAGE_COLUMNS, "") | written | {"stage": name + suffix, "topology": topology}
        row |= {"tol_pct": tolerance} | {f"{element}_tol_pct": text for element, text in own.items()}
        tolerances = {e: float(own.get(e, tolerance) or 0) / 100 for e in elements}
        gain = IDEAL_GAINS[topology]
        row["target_gain"] = _target(rng, gain(elements), wanted)
        spent = _spent(gain, elements, tolerances, float(row["target_gain"] or gain(elements)))
        rows.append(row | _accuracy(rng, spent, role.room))
    return rows


def _elements(rng: Random, role: Role, gain: float) -> dict[str, float]:
    """Elements of a circuit that has nearly the gain."""
    base = _preferred(_log_uniform(rng, role.base), E24) if role.base[0] else 0.0
    source, load, shunt = (_pick(rng, values) for values in (role.sources, role.loads, role.shunts))
    scatter = rng.random(), rng.random()
    match role.topologies[0]:
        case topology if topology in DESIGNS:
            elements = {"r_source": source} | DESIGNS[topology](gain, base)
        case "follower":
            elements = {"r_source": source, "r2": source if source and scatter[0] < 0.4 else 0.0}
        case "inverting":
            elements = {"r_source": source, "r1": base, "r2": gain * (base + source)}
        case "inverting_t":
            # r2 alone would have to be `gain` times r1; the T does with 2 r1 and r1/5 instead.
            r2, r4 = _preferred(2 * base), _preferred(base / 5)
            elements = {"r1": base, "r2": r2, "r3": r4 / (gain * base / r2 - 1 - r4 / r2), "r4": r4}
        case "non_inverting":
            elements = {"r_source": source, "r1": base, "r2": (gain - 1) * base}
        case "non_inverting_source":
            elements = {"r_source": source, "r_shunt": shunt, "r1": base, "r2": (gain - 1) * base}
        case "difference":
            elements = {"r_source_n": source, "r_source_p": source, "r1": base, "r3": base}
            elements["r2"] = elements["r4"] = gain * (base + source)
        case "transimpedance":
            elements = {"r_source": source, "r2": gain}
        case _:
            inputs = ["r1", "r2", "r3"][: len(role.topologies)]
            weights = (1.0, 0.5 + 1.5 * scatter[0], 0.5 + 1.5 * scatter[1])
            elements = {r: base * weight for r, weight in zip(inputs, weights, strict=False)}
            elements["r_f"] = gain * base
    elements["r_load"] = load
    return {element: _preferred(value) for element, value in elements.items() if value}


def _own_tolerances(rng: Random, role: Role, elements: Mapping[str, float], tolerance: str) -> dict[str, str]:
    """Tolerances of single elements: sensors and loads are no precision resistors, and some r1 are finer."""
    own = {}
    source_counts = role.topologies[0] == "inverting" or "r_shunt" in elements
    draws = rng.random(), rng.random(), rng.random()
    if "r_source" in elements and draws[0] < 0.5:
        own["r_source"] = "1" if source_counts else "10"
    if "r_load" in elements and draws[1] < 0.3:
        own["r_load"] = "5"
    if tolerance in {"0.5", "1"} and {"r1", "r2"} <= elements.keys() and draws[2] < 0.25:
        own |= {"r1": "0.1", "r2": "0.1"}
    return own


def _target(rng: Random, ideal: float, wanted: float) -> str:
    """The wanted gain as the table says it: mostly not, or as the resistors give it, or round."""
    draw = rng.random()
    if draw < 0.55:
        return ""
    if draw < 0.70:
        return f"{ideal:.10g}"
    if draw < 0.85:
        return f"{_significant(ideal, 4):.10g}"
    round_number = math.copysign(wanted, ideal)
    return f"{round_number if abs(ideal / round_number - 1) < 0.006 else _significant(ideal, 3):.10g}"


def _spent(
    gain: Callable[[Mapping[str, float]], float],
    elements: Mapping[str, float],
    tolerances: Mapping[str, float],
    target: float,
) -> float:
    """Largest error of the gain with an ideal op-amp over the corners of the tolerances."""
    corners = product(*((-tolerances[e], tolerances[e]) if tolerances[e] else (0.0,) for e in elements))
    return max(
        abs(gain({e: v * (1 + d) for (e, v), d in zip(elements.items(), corner, strict=True)}) / target - 1)
        for corner in corners
    )


def _accuracy(rng: Random, spent: float, room: Range) -> dict[str, str]:
    """The required accuracy, as one of the two columns."""
    draw, share = rng.random(), rng.random()
    limit_ppm = 1e6 * spent + _log_uniform(rng, room)
    if draw < HOPELESS and spent > 1e-5:
        limit_ppm = 1e6 * spent * (0.4 + 0.5 * share)
    elif draw > 1 - TRIVIAL:
        limit_ppm = 20_000 + 1e7 * spent
    step = 10.0 ** (math.floor(math.log10(limit_ppm)) - 1)
    limit_ppm = step * math.ceil(limit_ppm / step)
    if limit_ppm < 900 or (limit_ppm < 3000 and share < 0.5):
        return {"accuracy_ppm": f"{limit_ppm:.10g}"}
    return {"accuracy_pct": f"{limit_ppm / 1e4:.10g}"}


def _inverting(r: Mapping[str, float]) -> float:
    return -r["r2"] / (r.get("r_source", 0) + r["r1"])


def _tee(r: Mapping[str, float]) -> float:
    return r["r2"] + r["r4"] + r["r2"] * r["r4"] / r["r3"]


def _inverting_t(r: Mapping[str, float]) -> float:
    return -_tee(r) / r["r1"]


def _non_inverting(r: Mapping[str, float]) -> float:
    divider = 1 + r.get("r_source", 0) / r["r_shunt"] if "r_shunt" in r else 1.0
    return (1 + r["r2"] / r["r1"]) / divider


def _difference(r: Mapping[str, float]) -> float:
    down = r["r2"] / (r.get("r_source_n", 0) + r["r1"])
    up = r["r4"] / (r.get("r_source_p", 0) + r["r3"] + r["r4"]) * (1 + down)
    return (up + down) / 2


def _current_pump(r: Mapping[str, float]) -> float:
    unbalance = 1 / r["r1"] - r["r4"] / r["r3"] / r["r2"]
    return 1 / r["r1"] / (1 + r["r_load"] * unbalance)


def _current_pump_improved(r: Mapping[str, float]) -> float:
    from_plus = (1 + r["r4"] / r["r3"]) / r["r5"] + 1 / r["r2"]
    input_share = r["r2"] / (r["r1"] + r["r2"])
    unbalance = 1 / r["r5"] + 1 / r["r2"] - (1 - input_share) * from_plus
    return input_share * from_plus / (1 + r["r_load"] * unbalance)


def _instrumentation_2(r: Mapping[str, float]) -> float:
    mid = -0.5 - r["r2"] * (0.5 / r["r1"] + 1 / r["r_gain"])
    return 0.5 + r["r4"] * ((0.5 - mid) / r["r3"] + 1 / r["r_gain"])


def _instrumentation_3(r: Mapping[str, float]) -> float:
    mid1, mid2 = -0.5 - r["r1"] / r["r_gain"], 0.5 + r["r2"] / r["r_gain"]
    down = r["r4"] / r["r3"]
    return mid2 * r["r6"] / (r["r5"] + r["r6"]) * (1 + down) - mid1 * down


def _summing(element: str) -> Callable[[Mapping[str, float]], float]:
    return lambda r: -r["r_f"] / r[element]


IDEAL_GAINS: dict[str, Callable[[Mapping[str, float]], float]] = {
    "follower": lambda _: 1.0,
    "inverting": _inverting,
    "inverting_t": _inverting_t,
    "non_inverting": _non_inverting,
    "non_inverting_source": _non_inverting,
    "difference": _difference,
    "transimpedance": lambda r: -r["r2"],
    **{name: _summing(f"r{name[-1]}") for name in (*SUM_OF_TWO, *SUM_OF_THREE)},
    "all_pass": lambda _: 1.0,
    "cascade_inverting": lambda r: r["r2"] / r["r1"] * r["r4"] / r["r3"],
    "composite": _non_inverting,
    "current_amplifier": lambda r: 1 + r["r1"] / r["r2"],
    "current_pump": _current_pump,
    "current_pump_improved": _current_pump_improved,
    "difference_filtered": _difference,
    "follower_isolated": lambda _: 1.0,
    "instrumentation_2": _instrumentation_2,
    "instrumentation_3": _instrumentation_3,
    "integrator": _inverting,
    "inverting_bridged_t": lambda r: -1 / (1 / r["r5"] + 1 / _tee(r)) / r["r1"],
    "inverting_coil": _inverting,
    "low_pass_2": lambda r: 1 + r["r4"] / r["r3"],
    "low_pass_2_inverting": _inverting,
    "non_inverting_filtered": _non_inverting,
    "non_inverting_t": lambda r: 1 + (_tee(r) + r["r1"] * r["r4"] / r["r3"]) / r["r1"],
    "summing_non_inverting_in1": lambda r: (1 + r["r4"] / r["r3"]) * r["r2"] / (r["r1"] + r["r2"]),
    "summing_non_inverting_in2": lambda r: (1 + r["r4"] / r["r3"]) * r["r1"] / (r["r1"] + r["r2"]),
    "transimpedance_filtered": lambda r: -r["r2"],
    "transimpedance_t": lambda r: -_tee(r),
    "voltage_to_current": lambda r: 1 / r["r1"],
}

DESIGNS: dict[str, Callable[[float, float], dict[str, float]]] = {
    "all_pass": lambda _, base: {"r1": base, "r2": base, "r3": base / 2},
    "cascade_inverting": lambda gain, base: {
        **{"r1": base, "r2": math.sqrt(gain) * base, "r_mid": 2 * base},
        **{"r3": base, "r4": math.sqrt(gain) * base},
    },
    "composite": lambda gain, base: {"r1": base, "r2": (gain - 1) * base, "r3": base, "r4": base},
    "current_amplifier": lambda gain, base: {"r1": (gain - 1) * base, "r2": base},
    "current_pump": lambda gain, base: {"r1": 1 / gain, "r2": 1 / gain, "r3": base, "r4": base},
    # Balanced where r4/r3 is (r2 + r5)/r1.
    "current_pump_improved": lambda gain, base: {
        **{"r1": base, "r2": base - 1 / gain, "r3": base, "r4": base},
        "r5": 1 / gain,
    },
    "difference_filtered": lambda gain, base: {"r1": base, "r2": gain * base, "r3": base, "r4": gain * base},
    "follower_isolated": lambda _, base: {"r_iso": base / 100, "r2": base},
    "instrumentation_2": lambda gain, base: {
        **{"r1": base, "r2": base, "r3": base, "r4": base},
        "r_gain": 2 * base / (gain - 2),
    },
    "instrumentation_3": lambda gain, base: {
        **{"r_gain": 2 * base / (gain - 1), "r1": base, "r2": base},
        **{"r3": base, "r4": base, "r5": base, "r6": base},
    },
    "integrator": lambda gain, base: {"r1": base, "r2": gain * base},
    # A quarter of the feedback current flows through r5.
    "inverting_bridged_t": lambda gain, base: {
        **{"r1": base, "r2": base, "r3": base * 0.1 / (gain * 4 / 3 - 1.1), "r4": base / 10},
        "r5": 4 * gain * base,
    },
    "inverting_coil": lambda gain, base: {"r1": base, "r2": gain * base},
    "low_pass_2": lambda gain, base: {"r1": base, "r2": base, "r3": base, "r4": (gain - 1) * base},
    "low_pass_2_inverting": lambda gain, base: {"r1": base, "r2": gain * base, "r3": base / 2},
    "non_inverting_filtered": lambda gain, base: {"r1": base, "r2": (gain - 1) * base},
    "non_inverting_t": lambda gain, base: {
        **{"r1": base, "r2": 2 * base, "r3": base * 0.6 / (gain - 3.2), "r4": base / 5},
    },
    "summing_non_inverting_in1": lambda gain, base: {
        **{"r1": base, "r2": base, "r3": base, "r4": (2 * gain - 1) * base},
    },
    "transimpedance_filtered": lambda gain, _: {"r2": gain},
    "transimpedance_t": lambda gain, base: {
        **{"r2": base, "r3": base * 0.01 / (gain / base - 1.01), "r4": base / 100},
    },
    "voltage_to_current": lambda gain, _: {"r1": 1 / gain},
}
"""Elements that give the wanted gain, before they become preferred values, from the gain and the base."""

# ----------------------------------------------------------------------------------------------- parts


@dataclass(frozen=True)
class Family:
    """A family of op-amps.

    Attributes
    ----------
    name : str
        Its name.
    share : float
        Share of the parts.
    in_db : float
        Share of its data sheets that state the open-loop gain in dB.
    thorough : float
        Share of its data sheets that limit all three quantities.
    a_ol_db_min, a_ol_db_above : Range
        Lower limit of the open-loop gain, and how far the typical figure lies above [dB].
    r_id_typ, r_id_ratio : Range
        Typical differential input resistance [ohm], and its ratio to the lower limit.
    r_o_typ, r_o_ratio : Range
        Typical output resistance [ohm], and the ratio of the upper limit to it.
    """

    name: str
    share: float
    in_db: float
    thorough: float
    a_ol_db_min: Range
    a_ol_db_above: Range
    r_id_typ: Range
    r_id_ratio: Range
    r_o_typ: Range
    r_o_ratio: Range


FAMILIES = (
    Family("bipolar general purpose", 0.22, 0.1, 0.55,
           (82, 102), (6, 18), (1e5, 6e6), (2, 6), (30, 200), (1.4, 3)),
    Family("bipolar precision", 0.18, 0.3, 0.65,
           (108, 134), (3, 12), (1e6, 8e7), (1.5, 4), (20, 120), (1.3, 2.5)),
    Family("JFET input", 0.17, 0.3, 0.50,
           (86, 112), (4, 14), (1e11, 1e13), (10, 100), (30, 250), (1.4, 3)),
    Family("CMOS", 0.20, 1.0, 0.50,
           (84, 116), (4, 16), (1e11, 1e13), (10, 100), (100, 6000), (1.5, 3)),
    Family("CMOS zero-drift", 0.11, 1.0, 0.55,
           (112, 136), (6, 18), (5e7, 1e11), (2, 10), (200, 4000), (1.4, 2.5)),
    Family("fast", 0.12, 0.7, 0.50,
           (56, 88), (3, 10), (1e4, 3e6), (2, 5), (3, 40), (1.4, 3)),
)  # fmt: skip

LIMITED = {"a_ol": 0.75, "r_id": 0.35, "r_o": 0.35}
"""How often a data sheet that is not thorough gives the limit."""

TYPICAL = {"a_ol": 0.97, "r_id": 0.93, "r_o": 0.72}
"""How often it gives the typical figure."""

TYPICAL_BESIDE_LIMIT = 0.92
"""How often a thorough data sheet gives the typical figure too."""

PRINTED = (1.0, 1.2, 1.5, 1.8, 2.0, 2.5, 3.0, 3.5, 4.0, 5.0, 6.0, 7.0, 8.0, 9.0)
"""Figures that data sheets like to print. Rounding down keeps limit and typical figure in order."""

REPEATED_PART = "amp-0412"

_NO_GAIN = {"a_ol_min": "", "a_ol_typ": "", "a_ol_db_min": "", "a_ol_db_typ": ""}
FAULTY_PARTS: dict[str, dict[str, str]] = {
    "amp-0058": _NO_GAIN | {"a_ol_min": "2500O0", "a_ol_typ": "400000"},
    "amp-0137": {"r_id_min": "", "r_id_typ": "n/a"},
    "amp-0201": _NO_GAIN | {"a_ol_min": "-50000", "a_ol_typ": "200000"},
    "amp-0266": {"r_o_typ": "60", "r_o_max": "nan"},
    "amp-0349": _NO_GAIN | {"a_ol_min": "250000", "a_ol_typ": "120000"},
    "amp-0477": {"r_id_min": "5M", "r_id_typ": "2M5"},
    "amp-0533": {"r_o_typ": "180", "r_o_max": "120"},
    "amp-0690": _NO_GAIN | {"a_ol_db_min": "100000", "a_ol_db_typ": "400000"},
}
"""Cells that make a row faulty: a letter for a digit, no number, a negative gain, a NaN, a limit on the wrong
side of the typical figure (thrice), V/V in the columns for dB."""


def parts() -> list[dict[str, str]]:
    """The parts table, faulty rows included."""
    rng = Random(SEED_PARTS)  # noqa: S311
    rows = [_part(rng, f"amp-{number:04d}") for number in range(1, PARTS + 1)]
    for row in rows:
        row.update(FAULTY_PARTS.get(row["part"], {}))
    # Entered once more, with other figures, at the table's end.
    rows += [row | {"r_o_typ": "75", "r_o_max": "150"} for row in rows if row["part"] == REPEATED_PART]
    return rows


def _part(rng: Random, part: str) -> dict[str, str]:
    """A row of the parts table."""
    family = _weighted(rng, FAMILIES, [family.share for family in FAMILIES])
    in_db, thorough = rng.random() < family.in_db, rng.random() < family.thorough
    gain_min = _middling(rng, family.a_ol_db_min)
    gain_typ = gain_min + _middling(rng, family.a_ol_db_above)
    r_id_typ = _log_middling(rng, family.r_id_typ)
    r_id_min = r_id_typ / _log_middling(rng, family.r_id_ratio)
    r_o_typ = _log_middling(rng, family.r_o_typ)
    r_o_max = r_o_typ * _log_middling(rng, family.r_o_ratio)
    in_codes = rng.random() < 0.4

    def ohm(value: float) -> str:
        return _letter_code(_printed(value)) if in_codes and value < 1e9 else _plain(_printed(value))

    cells = {"r_id_min": ohm(r_id_min), "r_id_typ": ohm(r_id_typ)}
    cells |= {"r_o_typ": ohm(r_o_typ), "r_o_max": ohm(r_o_max)}
    if in_db:
        cells |= {"a_ol_db_min": str(round(gain_min)), "a_ol_db_typ": str(round(gain_typ))}
    else:
        cells["a_ol_min"] = _plain(_printed(10.0 ** (gain_min / 20)))
        cells["a_ol_typ"] = _plain(_printed(10.0 ** (gain_typ / 20)))
    for quantity in LIMITED:
        limit, typical = rng.random(), rng.random()
        has_limit = thorough or limit < LIMITED[quantity]
        has_typical = typical < (TYPICAL_BESIDE_LIMIT if thorough else TYPICAL[quantity])
        for column in [column for column in cells if column.startswith(quantity)]:
            if not (has_typical if column.endswith("typ") else has_limit):
                cells[column] = ""
    return dict.fromkeys(PART_COLUMNS, "") | {"part": part, "family": family.name} | cells


# ------------------------------------------------------------------------------- drawing and writing numbers


def _pick(rng: Random, choices: Sequence[T]) -> T:
    """One of the choices, all alike likely."""
    return choices[int(rng.random() * len(choices))]


def _weighted(rng: Random, choices: Sequence[T], weights: Sequence[float]) -> T:
    """One of the choices, as likely as its weight says."""
    left = rng.random() * math.fsum(weights)
    for choice, weight in zip(choices, weights, strict=True):
        left -= weight
        if left < 0:
            return choice
    return choices[-1]


def _middling(rng: Random, between: Range) -> float:
    """A number between the two, more often near their middle."""
    low, high = between
    return low + (high - low) * (rng.random() + rng.random()) / 2


def _log_middling(rng: Random, between: Range) -> float:
    """The same on a logarithmic scale."""
    low, high = between
    return math.exp(_middling(rng, (math.log(low), math.log(high))))


def _log_uniform(rng: Random, between: Range) -> float:
    """A number between the two, each decade alike likely."""
    low, high = between
    return low * math.exp(math.log(high / low) * rng.random())


def _significant(value: float, digits: int) -> float:
    """The value with so many significant digits."""
    return float(f"{value:.{digits - 1}e}")


def _preferred(value: float, series: Sequence[int] = PREFERRED) -> float:
    """The preferred value that is nearest in ratio."""
    decade = math.floor(math.log10(value)) - 2
    candidates = [(digits, decade) for digits in series] + [(series[0], decade + 1)]
    digits, decade = min(candidates, key=lambda c: abs(math.log(c[0] / value) + c[1] * math.log(10)))
    return float(f"{digits}e{decade}")


def _printed(value: float) -> float:
    """The value rounded down to a figure that data sheets print."""
    decade = math.floor(math.log10(value))
    figure = max(f for f in PRINTED if f == 1 or f <= value / 10.0**decade)
    return float(f"{figure}e{decade}")


def _ohm(rng: Random, value: float, in_codes: bool) -> str:
    """A resistance as the row writes them; one in twelve cells is written the other way."""
    return _letter_code(value) if (rng.random() < 1 / 12) != in_codes else _plain(value)


def _plain(value: float) -> str:
    """The value as a plain number."""
    return f"{value:.0e}".replace("e+", "e") if value >= 1e10 else f"{value:.10g}"


def _letter_code(value: float) -> str:
    """The value in the letter code of IEC 60062.

    >>> _letter_code(4700.0), _letter_code(100.0), _letter_code(1e7), _letter_code(49.9)
    ('4k7', '100R', '10M', '49R9')
    """
    unit, letter = next((u, c) for u, c in ((1e9, "G"), (1e6, "M"), (1e3, "k"), (0.0, "R")) if value >= u)
    whole, _, decimals = f"{value / (unit or 1.0):.10g}".partition(".")
    return f"{whole}{letter}{decimals}"


def write(path: Path, columns: Sequence[str], rows: Sequence[Mapping[str, str]]) -> None:
    """Write a table as CSV."""
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, columns, lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)


def main() -> None:
    """Write stages.csv and parts.csv into the folder named, or next to this file."""
    folder = Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).resolve().parent
    folder.mkdir(parents=True, exist_ok=True)
    write(folder / "stages.csv", STAGE_COLUMNS, stages())
    write(folder / "parts.csv", PART_COLUMNS, parts())


if __name__ == "__main__":
    main()
