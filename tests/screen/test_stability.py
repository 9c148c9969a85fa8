"""Crossovers and margins against closed forms, a control library, a search at 60 digits and published numbers."""

from __future__ import annotations

import random
from collections.abc import Mapping

import control
import mpmath
import numpy as np
import pytest

from forms import networks
from gainassay.forms.departures import FIGURES
from gainassay.forms.form import Form, derive
from gainassay.forms.library import library
from gainassay.forms.topology import Topology
from gainassay.screen import stability
from gainassay.screen.stability import (
    CHECKED,
    GRID,
    NO_BANDWIDTH,
    NO_SECOND_POLE,
    OUT_OF_REACH,
    Dynamics,
    Looked,
    margins,
    margins_of,
    response,
    roots,
)

LIBRARY = library()
FORMS: dict[str, Form] = {}
BLANK = {("resistor", "open"): np.inf, ("capacitor", "open"): 0.0, ("inductor", "open"): np.inf}


def part(
    a_ol: float = 1e5,
    gbw: float = 1e6,
    second_pole: float = np.inf,
    r_id: float = np.inf,
    r_o: float = 0.0,
    c_id: float = 0.0,
) -> Dynamics:
    figures = {"a_ol": 1.0 / a_ol, "r_id": 1.0 / r_id, "r_o": r_o, "gbw": 1.0 / gbw, "c_id": 2.0 * np.pi * c_id}
    nominal = np.array([[figures.get(figure.quantity, 0.0)] for figure in FIGURES])
    return Dynamics(nominal, np.array([gbw]), np.array([second_pole]))


def looked(topology: str, elements: Mapping[str, float], of_part: Dynamics) -> Looked:
    """One stage; elements that are not given are blank."""
    if topology not in FORMS:
        FORMS[topology] = derive(LIBRARY[topology])
    values = [
        elements.get(element.name, BLANK.get((element.kind, element.absent), 0.0))
        for element in LIBRARY[topology].elements
    ]
    return Looked(FORMS[topology], np.array(values)[:, None], of_part)


def found(topology: str, elements: Mapping[str, float], of_part: Dynamics) -> tuple[float, float, float, int]:
    one = margins(looked(topology, elements, of_part))
    crossover, phase, gain, doubt = (float(values[0, 0]) for values in vars(one).values())
    return crossover, phase, gain, int(doubt)


INVERTING = {"r1": 1e3, "r2": 1e4}


def test_a_single_pole_crosses_at_feedback_factor_times_bandwidth() -> None:
    """T = beta/(1/A + j f/GBW): |T| = 1 at GBW sqrt(beta^2 - 1/A^2), the phase there is that of 1/A + j f/GBW."""
    for a_ol in (30.0, 1e3, 1e7):
        beta = 1e3 / 11e3
        crossover, phase, gain, doubt = found("inverting", INVERTING, part(a_ol))
        expected = 1e6 * np.sqrt(beta**2 - 1.0 / a_ol**2)
        assert crossover == pytest.approx(expected, rel=1e-11)
        assert phase == pytest.approx(180.0 - np.degrees(np.arctan2(expected / 1e6, 1.0 / a_ol)), rel=1e-11)
        assert (gain, doubt) == (np.inf, CHECKED)
    assert found("follower", {}, part(1e12))[:2] == pytest.approx((1e6, 90.0), rel=1e-9)


def test_a_second_pole_at_the_bandwidth_leaves_a_follower_the_known_margin() -> None:
    """With T = f_t/(j f (1 + j f/f_t)), |T| = 1 at f_t sqrt((sqrt(5) - 1)/2), where the margin is 51.83 degrees."""
    crossover, phase, gain, _ = found("follower", {}, part(1e15, 1e6, 1e6))
    golden = (np.sqrt(5.0) - 1.0) / 2.0
    assert crossover == pytest.approx(1e6 * np.sqrt(golden), rel=1e-11)
    assert phase == pytest.approx(np.degrees(np.arccos(golden)), rel=1e-11)
    assert gain == np.inf


def test_an_integrators_loop_has_a_feedback_factor_of_one_where_its_capacitor_conducts() -> None:
    crossover, phase, _, _ = found("integrator", {"r1": 1e5, "r2": 1e7, "c1": 1e-6}, part(1e6, 1e6, 1e8))
    assert crossover == pytest.approx(1e6, rel=1e-3)
    assert phase == pytest.approx(90.0 - np.degrees(np.arctan(0.01)), abs=0.01)


def by_control(numerator: list[float], denominator: list[float]) -> tuple[float, float, float]:
    """Crossover [Hz], phase margin [deg], gain margin [dB] as python-control finds them."""
    gain, phase, _, _, crossover, _ = control.stability_margins(control.tf(numerator, denominator))
    return crossover / (2.0 * np.pi), phase, 20.0 * np.log10(gain)


def open_loop(a_ol: float, gbw: float, pole: float) -> np.ndarray:
    """1/A(s) as a polynomial in s."""
    return np.polymul([1.0 / (2 * np.pi * gbw), 1.0 / a_ol], [1.0 / (2 * np.pi * pole), 1.0])


@pytest.mark.oracle
@pytest.mark.parametrize("seed", range(12))
def test_two_poles_against_a_control_library(seed: int) -> None:
    rng = random.Random(seed)
    a_ol, gbw, pole = (10.0 ** rng.uniform(*ends) for ends in ((4, 7), (4, 8), (4, 8)))
    r1, r2 = 10.0 ** rng.uniform(2, 4), 10.0 ** rng.uniform(3, 5)
    crossover, phase, gain, _ = found("inverting", {"r1": r1, "r2": r2}, part(a_ol, gbw, pole))
    expected = by_control([r1 / (r1 + r2)], list(open_loop(a_ol, gbw, pole)))
    assert (crossover, phase) == pytest.approx(expected[:2], rel=1e-8)
    assert gain == np.inf == expected[2]


@pytest.mark.oracle
@pytest.mark.parametrize("seed", range(12))
def test_a_capacitive_load_behind_the_output_resistance_against_a_control_library(seed: int) -> None:
    """A follower with its feedback from the output: r_iso and r_o in series, then c_load beside r_load."""
    rng = random.Random(seed)
    a_ol, gbw, pole = (10.0 ** rng.uniform(*ends) for ends in ((4, 6), (5, 7), (6, 8)))
    r_o, r_iso, r_load, c_load = (10.0 ** rng.uniform(*ends) for ends in ((1, 3), (0, 2), (3, 5), (-10, -7)))
    elements = {"r_iso": r_iso, "r_load": r_load, "c_load": c_load, "r2": 0.0}
    crossover, phase, gain, _ = found("follower_isolated", elements, part(a_ol, gbw, pole, r_o=r_o))
    series = r_o + r_iso
    denominator = np.polymul(open_loop(a_ol, gbw, pole), [series * r_load * c_load, series + r_load])
    expected = by_control([r_load], list(denominator))
    assert (crossover, phase, gain) == pytest.approx(expected, rel=1e-7, abs=1e-7)


def test_a_loop_past_180_degrees_has_a_negative_margin() -> None:
    elements = {"r_iso": 1.0, "r_load": 1e6, "c_load": 1e-6, "r2": 0.0}
    _, phase, gain, _ = found("follower_isolated", elements, part(1e5, 1e7, 1e6, r_o=100.0))
    assert -90.0 < phase < 0.0
    assert gain < 0.0


def values_of(topology: Topology, rng: random.Random) -> dict[str, float]:
    ends = {"resistor": (2.5, 5.0), "capacitor": (-10.0, -7.0), "inductor": (-6.0, -3.0)}
    return {element.name: 10.0 ** rng.uniform(*ends[element.kind]) for element in topology.elements}


def return_ratio(
    topology: Topology, elements: Mapping[str, float], of_part: Dynamics, name: str, hertz: float
) -> complex:
    """At a frequency, by the nodal solve at 60 digits."""
    with mpmath.workdps(networks.DIGITS):
        at = mpmath.mpf(hertz)
        figures = dict(zip((figure.quantity for figure in FIGURES), of_part.nominal[:, 0].tolist(), strict=True))
        a, g_id, r_o, c = (mpmath.mpf(figures[quantity]) for quantity in ("a_ol", "r_id", "r_o", "c_id"))
        gbw, pole = float(of_part.gbw[0]), float(of_part.second_pole[0])
        inverse = (a + 1j * at / gbw) * (1 + 1j * at / pole)
        several = len(topology.amplifiers) > 1
        values = {name: mpmath.mpf(value) for name, value in elements.items()}
        for amplifier in topology.amplifiers:
            suffix = f"_{amplifier.name}" if several else ""
            values |= {f"A{suffix}": 1 / inverse, f"r_id{suffix}": 1 / (g_id + 1j * at * c), f"r_o{suffix}": r_o}
        s = 2j * mpmath.pi * at
        return complex(networks.return_ratio(topology, networks.impedances(topology, values, s), name))


@pytest.mark.oracle
@pytest.mark.parametrize("name", sorted(LIBRARY))
def test_return_ratios_against_a_nodal_solve(name: str) -> None:
    """Of every topology and amplifier; at each crossover found, |T| is 1 and the phase is as told."""
    rng, topology = random.Random(name), LIBRARY[name]
    of_part = part(10.0 ** rng.uniform(4, 6), 10.0 ** rng.uniform(5, 7), 10.0 ** rng.uniform(5, 8), 1e6, 70.0, 3e-12)
    elements = values_of(topology, rng)
    one = looked(name, elements, of_part)
    hertz = np.array([0.1, 37.0, 4e3, 5e5, 2e7])
    _, loops = response(one, hertz)
    assert tuple(loops) == tuple(amplifier.name for amplifier in topology.amplifiers)
    for amplifier, seen in loops.items():
        expected = [return_ratio(topology, elements, of_part, amplifier, float(at)) for at in hertz]
        assert seen.tolist() == pytest.approx(expected, rel=1e-9)
        margin = margins_of(one, amplifier)
        crossover = float(margin.crossover_hz[0, 0])
        if np.isfinite(crossover):
            at_crossover = return_ratio(topology, elements, of_part, amplifier, crossover)
            assert abs(at_crossover) == pytest.approx(1.0, rel=1e-8)
            turn = float(margin.phase_margin_deg[0, 0]) - np.degrees(np.angle(-at_crossover))
            assert turn == pytest.approx(360.0 * round(turn / 360.0), abs=1e-6)


@pytest.mark.parametrize("name", ["cascade_inverting", "instrumentation_3", "composite"])
def test_of_several_amplifiers_the_one_with_the_smallest_phase_margin_counts(name: str) -> None:
    rng, topology = random.Random(name), LIBRARY[name]
    one = looked(name, values_of(topology, rng), part(1e5, 1e6, 3e6, 1e6, 50.0))
    each = [margins_of(one, amplifier) for amplifier in stability.amplifiers(one.form)]
    whole = margins(one)
    least = min(each, key=lambda margin: float(margin.phase_margin_deg[0, 0]))
    for field, values in vars(whole).items():
        assert values.tolist() == getattr(least, field).tolist()


def test_what_is_missing_is_never_a_margin() -> None:
    assert found("inverting", INVERTING, part(gbw=np.nan))[3] == NO_BANDWIDTH
    assert np.isnan(found("inverting", INVERTING, part(gbw=np.nan))[1])
    crossover, phase, _, doubt = found("inverting", INVERTING, part(second_pole=np.nan))
    assert (crossover, phase) == found("inverting", INVERTING, part())[:2]
    assert doubt == NO_SECOND_POLE
    beyond = found("inverting", INVERTING, part(1e9, 1e14))
    assert np.isnan(beyond[:3]).all()
    assert beyond[3] == OUT_OF_REACH


def test_a_loop_gain_below_one_everywhere_cannot_oscillate() -> None:
    crossover, phase, gain, doubt = found("inverting", INVERTING, part(5.0))
    assert np.isnan(crossover)
    assert (phase, gain, doubt) == (np.inf, np.inf, CHECKED)


@pytest.mark.parametrize("hertz", [float(GRID[40]), float(GRID[41]), float(np.nextafter(GRID[40], 0.0))])
def test_a_crossover_on_a_point_of_the_grid_is_found(hertz: float) -> None:
    assert found("follower", {}, part(1e18, hertz))[0] == pytest.approx(hertz, rel=1e-11)


ENDS = ((-7, -4), (-7, -5), (0, 3), (-9, -8), (-5, -4), (-8, -4), (-12, -10), (-12, -10))
"""Decades of the figures of a part, in their order."""


def test_no_bit_depends_on_blocks_or_on_what_else_is_looked_at(monkeypatch: pytest.MonkeyPatch) -> None:
    rng = np.random.default_rng(5)
    values = np.array([np.zeros(9), 10 ** rng.uniform(2, 4, 9), 10 ** rng.uniform(3, 6, 9), 10 ** rng.uniform(2, 5, 9)])
    parts = Dynamics(
        10 ** np.array([rng.uniform(low, high, 14) for low, high in ENDS]),
        10 ** rng.uniform(4, 8, 14),
        10 ** rng.uniform(5, 8, 14),
    )
    form = derive(LIBRARY["inverting"])
    whole = margins(Looked(form, values, parts))
    monkeypatch.setattr(stability, "STAGES_PER_BLOCK", 2)
    monkeypatch.setattr(stability, "PARTS_PER_BLOCK", 3)
    wanted = rng.random((9, 14)) < 0.7
    some = margins(Looked(form, values, parts), wanted)
    alone = margins(Looked(form, values[:, 4:5], parts.part(slice(6, 7))))
    for field in ("crossover_hz", "phase_margin_deg", "gain_margin_db"):
        assert getattr(some, field)[wanted].tobytes() == getattr(whole, field)[wanted].tobytes()
        assert getattr(alone, field)[0, 0] == getattr(whole, field)[4, 6]
        assert np.isnan(getattr(some, field)[~wanted]).all()


def test_roots_of_many_functions() -> None:
    targets = np.array([1e-9, 0.3, 0.5, 1.0 - 1e-12])

    def function(which: np.ndarray, x: np.ndarray) -> np.ndarray:
        return np.asarray(np.tanh(40.0 * (x - targets[which])))

    assert roots(function, np.zeros(4), np.ones(4)) == pytest.approx(targets, abs=1e-11)


# Published bandwidths of single-pole loops. The closed-loop gain's -3 dB frequency is the crossover where 1/A_OL is 0.
PUBLISHED = [
    ("C29", 1e6, "non_inverting", 1e3, 9e3, 100e3, 3, "Malvino & Bates, 7th ed., Example 19-13, read in a text"),
    ("C38", 1e6, "inverting", 1.5e3, 75e3, 19.6e3, 3, "set 2825, Example 10.4: prints 20, from |gain|"),
    ("C45 +1000", 1e6, "non_inverting", 1.0, 999.0, 1e3, 1, "Sedra & Smith, sec. 2.7, from memory"),
    ("C45 +100", 1e6, "non_inverting", 1.0, 99.0, 10e3, 2, "Sedra & Smith, sec. 2.7, from memory"),
    ("C45 +10", 1e6, "non_inverting", 1.0, 9.0, 100e3, 3, "Sedra & Smith, sec. 2.7, from memory"),
    ("C45 -1", 1e6, "inverting", 1.0, 1.0, 500e3, 3, "Sedra & Smith, sec. 2.7, from memory"),
    ("C45 -10", 1e6, "inverting", 1.0, 10.0, 90.9e3, 3, "Sedra & Smith, sec. 2.7, from memory"),
    ("C45 -100", 1e6, "inverting", 1.0, 100.0, 9.9e3, 2, "Sedra & Smith, sec. 2.7, from memory"),
    ("C45 -1000", 1e6, "inverting", 1.0, 1000.0, 1e3, 1, "Sedra & Smith, sec. 2.7, from memory"),
    ("C53", 1e6, "non_inverting", 1e3, 10e3, 90.9e3, 3, "Gayakwad, Example 3-1, from memory"),
]  # fmt: skip


@pytest.mark.source
@pytest.mark.parametrize(("name", "gbw", "topology", "r1", "r2", "printed", "digits", "_"), PUBLISHED)
def test_published_bandwidths(
    name: str, gbw: float, topology: str, r1: float, r2: float, printed: float, digits: int, _: str
) -> None:
    crossover, phase, _gain, _doubt = found(topology, {"r1": r1, "r2": r2}, part(2e5, gbw))
    assert float(f"{crossover:.{digits}g}") == pytest.approx(printed, rel=1e-12), name
    assert phase == pytest.approx(90.0, abs=0.5)


@pytest.mark.source
def test_a_published_bandwidth_of_the_closed_loop() -> None:
    """C36, textbook set 1850, Example 3.3, read in a companion script: 1004.001 Hz, f0 (1 + A beta)."""
    one = looked("non_inverting", {"r1": 100.0, "r2": 1e5}, part(2e5, 1e6))
    gain, _ = response(one, np.array([1e-3, 1003.9995, 1004.0015]))
    below, above = np.abs(gain[1:]) / abs(gain[0])
    assert above < np.sqrt(0.5) < below
