"""Stages at a frequency against complex solves at 60 digits, and their corners against all corners."""

from __future__ import annotations

import random
from dataclasses import replace
from itertools import product

import mpmath
import numpy as np
import pytest
from numpy.typing import NDArray

import oracle
from gainassay.contracts.moves import MOVES
from gainassay.contracts.signals import Signals
from gainassay.forms import coefficients
from gainassay.forms.departures import DEPARTURES, FIGURES
from gainassay.forms.form import Form, Ratio, derive
from gainassay.forms.library import library
from gainassay.forms.topology import Topology
from gainassay.screen import at_frequency, spots
from gainassay.screen.boxes import StageBox, box
from gainassay.screen.corners import PartSide
from gainassay.screen.kernel import UNBOUNDED, Outcome
from gainassay.screen.spots import SpotSide

LIBRARY = library()
Array = NDArray[np.float64]


def stages_of(
    topology: Topology,
    values: list[dict[str, float]],
    hertz: list[float],
    tolerance: float,
    phase_limit: float = np.inf,
) -> StageBox:
    at = np.array([[one[element.name] for one in values] for element in topology.elements])
    spreads = np.zeros((len(MOVES), *at.shape))
    spreads[0] = np.where(np.isfinite(at) & (at > 0.0), tolerance, 0.0)
    count = len(values)
    signals = Signals(np.array([hertz]), np.zeros(count, dtype=bool), np.full(count, phase_limit))
    return replace(box(at, spreads, np.ones(count), np.full(count, np.nan)), signals=signals)


def side_of(form: Form, box: StageBox, figures: Array) -> SpotSide:
    return spots.stage_side(form, box, figures[: len(FIGURES)].max(axis=1))


def parts_of(figures: Array) -> PartSide:
    """Parts of figures in the order of `NAMES`."""
    own, lags = figures[: len(FIGURES)], figures[len(FIGURES) :]
    return at_frequency.part_side(own, own, lags, np.zeros(own.shape, np.uint8))


def screened(form: Form, box: StageBox, figures: Array) -> tuple[SpotSide, Outcome, Array, Array]:
    """Stages against parts, with the terms at the worst and at the nominal."""
    parts, stages = parts_of(figures), side_of(form, box, figures)
    outcome = at_frequency.screen(form, stages, parts)
    terms = np.array(list(at_frequency.account(form, stages, parts, outcome)))
    return stages, outcome, terms, np.array(list(at_frequency.nominal_account(form, stages, parts, outcome)))


NAMES = (*(figure.quantity for figure in FIGURES), "second_pole", "cmrr_corner")


def figures_of(**known: float) -> list[float]:
    """Departures in the order of `NAMES`, 0 where nothing is said."""
    return [known.get(name, 0.0) for name in NAMES]


def random_figures(rng: random.Random, hertz: float, common_mode: bool = False) -> list[float]:
    """Of a part that is some use at a frequency."""
    gbw, r_id = hertz * 10.0 ** rng.uniform(1.5, 5), 10.0 ** rng.uniform(5, 12)
    found = {
        "a_ol": 10.0 ** -rng.uniform(3, 6),
        "r_id": 1.0 / r_id,
        "r_o": 10.0 ** rng.uniform(0, 2.5),
        "gbw": 1.0 / gbw,
        "c_id": rng.choice([0.0, 2.0 * np.pi * 10.0 ** rng.uniform(-12.5, -10.5)]),
        "second_pole": rng.choice([0.0, 0.3 / gbw]),
    }
    if common_mode:
        found |= {
            "r_icm": 10.0 ** -rng.uniform(6, 11),
            "cmrr": 10.0 ** -rng.uniform(3, 6),
            "c_icm": 2.0 * np.pi * 10.0 ** rng.uniform(-12.5, -11),
            "cmrr_corner": rng.choice([0.0, 10.0 ** -rng.uniform(2, 5)]),
        }
    return figures_of(**found)


@pytest.mark.oracle
@pytest.mark.parametrize("topology", LIBRARY.values(), ids=LIBRARY)
def test_magnitude_phase_and_account(topology: Topology) -> None:
    """Nominal figures of random stages and parts against a solve, to 1e-9 of the error."""
    rng = random.Random(f"{topology.name} magnitude")
    against_the_oracle(topology, derive(topology), rng, common_mode=False)


def against_the_oracle(topology: Topology, form: Form, rng: random.Random, common_mode: bool) -> None:
    hertz = [10.0 ** rng.uniform(0, 6) for _ in range(4)]
    values = [oracle.random_values(topology, rng, f) for f in hertz]
    figures = np.array([random_figures(rng, f, common_mode) for f in hertz]).T
    _, outcome, _, terms = screened(form, stages_of(topology, values, hertz, 0.0), figures)
    for i, f in enumerate(hertz):
        ohms = oracle.impedances(topology, values[i], f)
        with mpmath.workdps(oracle.DIGITS):
            at, of = mpmath.mpf(f), {name: mpmath.mpf(value) for name, value in zip(NAMES, figures[:, i], strict=True)}
            fall = mpmath.mpc(1, at * of["cmrr_corner"])
            part = oracle.Part(
                a_ol=1 / (mpmath.mpc(of["a_ol"], at * of["gbw"]) * mpmath.mpc(1, at * of["second_pole"])),
                r_id=1 / mpmath.mpc(of["r_id"], at * of["c_id"]),
                r_o=of["r_o"],
                **{name: 1 / mpmath.mpc(of["r_icm"], at * of["c_icm"]) for name in ("r_icp", "r_icn") if of["r_icm"]},
                **({"cmrr": 1 / (of["cmrr"] * fall)} if of["cmrr"] else {}),
            )
            ratio = oracle.gain(topology, ohms, part) / oracle.gain(topology, ohms, oracle.IDEAL)
            error = float(abs(ratio) - 1)
        size = np.abs(terms[:, i, i]).sum()
        assert abs(outcome.error_nominal[i, i] - error) <= 1e-9 * size, (values[i], f)
        assert terms[:, i, i].sum() == pytest.approx(outcome.error_nominal[i, i], rel=0, abs=1e-12 * size)


def brute_force(form: Form, stages: StageBox, figures: Array, reference: complex) -> tuple[Array, Array]:
    """Magnitude and phase errors of one pair at every corner of its box."""
    assert stages.signals is not None
    moving = np.flatnonzero(stages.own.moves()[:, 0])
    low, high = (end[:, 0] for end in stages.ends())
    bits = (np.arange(1 << len(moving))[:, None] >> np.arange(len(moving))) & 1
    values = np.repeat(stages.values, len(bits), axis=1)
    for place, element in enumerate(moving):
        values[element] *= np.where(bits[:, place], high[element], low[element])
    hertz = float(stages.signals.hertz[0, 0])
    at = coefficients.evaluate(form, coefficients.at_frequency(form, values, np.full(len(bits), hertz)))
    of = dict(zip(NAMES, figures.tolist(), strict=True))
    found = []
    for on in product((0.0, 1.0), repeat=5):
        departures = {
            "a": (on[0] * of["a_ol"] + 1j * hertz * on[1] * of["gbw"]) * (1.0 + 1j * hertz * of["second_pole"]),
            "g_id": on[2] * of["r_id"] + 1j * hertz * on[3] * of["c_id"],
            "r_o": on[4] * of["r_o"],
        }
        m = np.array([np.prod([departures[form.departures[i][1]] for i in monomial]) for monomial in form.monomials])
        e = at.gain_ideal / reference - 1.0
        found.append(e + (1.0 + e) * (at.contrasts.T @ m) / (1.0 + at.loadings.T @ m))
    w = np.concatenate(found)
    return np.abs(1.0 + w) - 1.0, np.degrees(np.angle(1.0 + w))


def misses(topology: Topology, count: int) -> tuple[list[float], list[float], list[int]]:
    """What the corners visited leave out of the brute-force worst case, of magnitude and of phase.

    A share of the pair's own, less a thousandth of the largest of the stage's parts: corners are those of a whole
    table, and what moves a part that is a thousand times better is little looked at.
    """
    rng = random.Random(f"{topology.name} corners")
    form = derive(topology)
    magnitude: list[float] = []
    phase: list[float] = []
    corners: list[int] = []
    for _ in range(count):
        hertz = 10.0 ** rng.uniform(1, 5)
        one = stages_of(topology, [oracle.random_values(topology, rng, hertz)], [hertz], rng.choice([1e-3, 1e-2]), 1.0)
        figures = np.array([random_figures(rng, hertz) for _ in range(3)]).T
        side, outcome, terms, _ = screened(form, one, figures)
        reference = coefficients.gain_ideal(form, coefficients.at_frequency(form, one.values, np.array([hertz])))[0]
        corners.append(len(side.plans[0].corners))
        every = [brute_force(form, one, figures[:, p], complex(reference)) for p in range(3)]
        for p in range(3):
            assert outcome.corner[0, p] != UNBOUNDED
            assert outcome.phase is not None
            for found, of_all, left in ((outcome.error_worst, 0, magnitude), (outcome.phase, 1, phase)):
                worst, largest = np.abs(every[p][of_all]).max(), max(np.abs(one[of_all]).max() for one in every)
                missed = worst - abs(found[0, p])
                left.append(max(min(missed, 0.0), missed - 1e-3 * largest) / worst)
            size = np.abs(terms[:, 0, p]).sum()
            assert terms[:, 0, p].sum() == pytest.approx(outcome.error_worst[0, p], rel=0, abs=1e-12 * size)
            assert outcome.dominant_value[0, p] == terms[outcome.dominant[0, p], 0, p]
    return magnitude, phase, corners


ONE_AMPLIFIER = [topology for topology in LIBRARY.values() if len(topology.amplifiers) == 1]


@pytest.mark.oracle
@pytest.mark.parametrize("topology", ONE_AMPLIFIER, ids=lambda topology: topology.name)
def test_common_mode(topology: Topology) -> None:
    """With common-mode input resistance and capacitance, and a rejection that falls; all of them nominally."""
    rng = random.Random(f"{topology.name} common mode")
    form = derive(topology, DEPARTURES)
    # Every variable is at its limit nominally: so that the rejection does not cancel, only its positive part is in.
    positive = replace(form, contrasts=tuple(_without(form, of) for of in enumerate(form.contrasts)))
    positive = replace(positive, loadings=tuple(_without(form, of) for of in enumerate(form.loadings)))
    against_the_oracle(topology, positive, rng, common_mode=True)


def _without(form: Form, of: tuple[int, Ratio]) -> Ratio:
    """A coefficient function, 0 where the negative part of the rejection is a factor."""
    k, ratio = of
    negative = any(form.departures[i][1] == "c_neg" for i in form.monomials[k])
    return Ratio((), ratio.denominator) if negative else ratio


@pytest.mark.oracle
@pytest.mark.parametrize("topology", ONE_AMPLIFIER, ids=lambda topology: topology.name)
def test_corners_visited_are_the_worst_of_all(topology: Topology) -> None:
    magnitude, phase, _ = misses(topology, 2)
    assert min(magnitude) > -1e-9
    assert max(magnitude) < 0.02
    assert max(phase) < 0.03


def in_band(topology: Topology, values: dict[str, float], low: float, high: float, tolerance: float) -> StageBox:
    one = stages_of(topology, [values], [low], tolerance)
    signals = Signals(np.array([[low], [high]]), np.ones(1, dtype=bool), np.full(1, np.inf))
    return replace(one, signals=signals)


PEAKS = {
    "low_pass_2": {"r1": 1e4, "r2": 1e4, "c1": 1e-7, "c2": 1e-11, "r3": 1e4, "r4": 1e2, "r_load": np.inf},
    "inverting_coil": {"r1": 10.0, "l1": 1e-3, "r2": 1e4, "c1": 1e-9, "r_load": np.inf},
    "non_inverting": {"r1": 1e3, "r2": 9e3, "r_load": np.inf, "r_source": 0.0},
    "differentiator": {"c1": 1e-8, "r1": 10.0, "r2": 1e5, "c2": 0.0, "r_load": np.inf},
}


@pytest.mark.oracle
@pytest.mark.parametrize("name", PEAKS)
@pytest.mark.parametrize("tolerance", [0.0, 0.01])
def test_largest_error_in_a_band(name: str, tolerance: float) -> None:
    """Against a scan of frequencies, each as a stage of its own: not below it, and above by no more than its steps."""
    rng, topology = random.Random(name), LIBRARY[name]
    form, low, high = derive(topology), 37.0, 5.3e5
    values = {element.name: PEAKS[name].get(element.name, np.inf) for element in topology.elements}
    figures = np.array([random_figures(rng, 1e4) for _ in range(5)]).T
    _, outcome, terms, nominal = screened(form, in_band(topology, values, low, high, tolerance), figures)
    assert outcome.hertz is not None
    scan = np.geomspace(low, high, 1201).tolist()
    box = stages_of(topology, [values] * len(scan), scan, tolerance)
    of_scan = at_frequency.screen(form, side_of(form, box, figures), parts_of(figures)).error_worst
    largest = np.abs(of_scan).max(axis=0)
    found = np.abs(outcome.error_worst[0])
    assert (found >= largest * (1.0 - 1e-9)).all()
    assert (found <= largest * 1.2).all()
    # At the frequency that it states.
    there = stages_of(topology, [values] * 5, outcome.hertz[0].tolist(), tolerance)
    again = at_frequency.screen(form, side_of(form, there, figures), parts_of(figures))
    np.testing.assert_allclose(np.diagonal(again.error_worst), outcome.error_worst[0], rtol=1e-4)
    np.testing.assert_allclose(np.diagonal(again.error_nominal), outcome.error_nominal[0], rtol=1e-9)
    np.testing.assert_allclose(terms[:, 0].sum(axis=0), outcome.error_worst[0], rtol=1e-9)
    np.testing.assert_allclose(nominal[:, 0].sum(axis=0), outcome.error_nominal[0], rtol=1e-9)
    assert (outcome.hertz[0] > low).any()


@pytest.mark.oracle
def test_a_sharp_resonance_between_points_is_found() -> None:
    """A filter of quality 200, whose peak is far narrower than the points of a band are apart; against a fine scan."""
    topology = LIBRARY["low_pass_2"]
    form = derive(topology)
    values = {"r1": 1e4, "r2": 1e4, "c1": 1.3e-8, "c2": 1.3e-8, "r3": 1e4, "r4": 1.995e4, "r_load": np.inf}
    resonance = 1.0 / (2.0 * np.pi * 1e4 * 1.3e-8)
    figures = np.array([figures_of(a_ol=1e-6, r_id=1e-9, r_o=10.0, gbw=1e-9)]).T
    assert spots.POINTS_PER_DECADE < 100
    _, outcome, _, _ = screened(form, in_band(topology, values, 10.0, 1e5, 0.0), figures)
    scan = (resonance * np.linspace(0.97, 1.03, 4_001)).tolist()
    box = stages_of(topology, [values] * len(scan), scan, 0.0)
    of_scan = np.abs(at_frequency.screen(form, side_of(form, box, figures), parts_of(figures)).error_worst[:, 0])
    assert abs(outcome.error_worst[0, 0]) >= of_scan.max() * (1.0 - 1e-9)
    assert abs(outcome.error_worst[0, 0]) <= of_scan.max() * (1.0 + 1e-3)
    assert of_scan.max() > 10.0 * of_scan[0]


def test_a_stage_with_several_frequencies_has_the_worst_of_them() -> None:
    rng, topology = random.Random("several"), LIBRARY["inverting"]
    form, values = derive(topology), {"r1": 1e4, "r2": 1e5, "r_load": 2e3, "r_source": 0.0}
    figures = np.array([random_figures(rng, 1e3) for _ in range(9)]).T
    hertz = [100.0, 2.2e3, 3e4]
    one = stages_of(topology, [values], hertz[:1], 1e-3)
    several = replace(one, signals=Signals(np.array([hertz]).T, np.zeros(1, dtype=bool), np.full(1, np.inf)))
    found = at_frequency.screen(form, side_of(form, several, figures), parts_of(figures))
    alone = stages_of(topology, [values] * 3, hertz, 1e-3)
    each = at_frequency.screen(form, side_of(form, alone, figures), parts_of(figures))
    place = np.abs(each.error_worst).argmax(axis=0)
    every = np.arange(9)
    assert found.hertz is not None
    np.testing.assert_array_equal(found.hertz[0], np.array(hertz)[place])
    for name in ("error_worst", "error_nominal", "dominant", "dominant_value"):
        np.testing.assert_array_equal(getattr(found, name)[0], getattr(each, name)[place, every])
    assert found.phase is not None
    assert each.phase is not None
    np.testing.assert_array_equal(np.abs(found.phase[0]), np.abs(each.phase).max(axis=0))


def test_the_same_bits_whatever_the_blocks() -> None:
    rng, topology = random.Random("blocks"), LIBRARY["integrator"]
    form, hertz = derive(topology), [10.0 ** rng.uniform(1, 5) for _ in range(4)]
    one = stages_of(topology, [oracle.random_values(topology, rng, f) for f in hertz], hertz, 1e-3)
    assert one.signals is not None
    is_band = np.arange(4) == 3
    ends = np.stack([one.signals.hertz[0], np.where(is_band, 3.0 * one.signals.hertz[0], np.nan)])
    one = replace(one, signals=Signals(ends, is_band, one.signals.phase_limits))
    figures = np.array([random_figures(rng, hertz[0]) for _ in range(53)]).T
    parts, stages = parts_of(figures), side_of(form, one, figures)
    whole = at_frequency.screen(form, stages, parts)
    for block in (20, 124, 53 * 3):
        other = at_frequency.screen(form, stages, parts, block)
        for name, values in vars(whole).items():
            if values is not None:
                np.testing.assert_array_equal(values, getattr(other, name), err_msg=f"{name} {block}")


def test_next_to_nothing_left_of_a_gain_is_an_error_of_minus_one() -> None:
    """Where rounding would make the square of the magnitude negative."""
    topology = LIBRARY["inverting"]
    values = {"r1": 1e3, "r2": 1e4, "r_load": np.inf, "r_source": 0.0}
    hertz = [10.0**rise for rise in range(9, 18)]
    figures = np.array([figures_of(a_ol=1e-5, gbw=1e-6, second_pole=1e-6)]).T
    _, outcome, _, _ = screened(derive(topology), stages_of(topology, [values] * len(hertz), hertz, 1e-3), figures)
    np.testing.assert_allclose(outcome.error_worst[:, 0], -1.0, atol=1e-6)


@pytest.mark.source
@pytest.mark.parametrize(
    ("r2", "hertz"),
    [(999e3, 1e3), (99e3, 1e4), (9e3, 1e5), (0.0, 1e6)],
)
def test_published_bandwidth(r2: float, hertz: float) -> None:
    """C45, C29: a part of f_t = 1 MHz has its -3 dB frequency at f_t over the gain (Sedra & Smith, sec. 2.7)."""
    topology = LIBRARY["non_inverting"]
    values = {"r1": 1e3, "r2": r2, "r_load": np.inf, "r_source": 0.0}
    figures = np.array([figures_of(gbw=1e-6)]).T
    _, outcome, _, _ = screened(derive(topology), stages_of(topology, [values], [hertz], 0.0), figures)
    assert outcome.phase is not None
    assert 1.0 + outcome.error_worst[0, 0] == pytest.approx(0.5**0.5, rel=1e-12)
    assert outcome.phase[0, 0] == pytest.approx(-45.0, rel=1e-12)


@pytest.mark.source
def test_published_inverting_bandwidth() -> None:
    """C45: gains of -1, -10 and -100 end at 500, 90.9 and 9.9 kHz: the noise gain counts, not the gain."""
    topology = LIBRARY["inverting"]
    for r2, khz, digit in ((1e3, 500.0, 1.0), (1e4, 90.9, 0.1), (1e5, 9.9, 0.1)):
        values = {"r1": 1e3, "r2": r2, "r_load": np.inf, "r_source": 0.0}
        figures = np.array([figures_of(gbw=1e-6)]).T
        ends = [(khz - digit) * 1e3, (khz + digit) * 1e3]
        _, outcome, _, _ = screened(derive(topology), stages_of(topology, [values] * 2, ends, 0.0), figures)
        below, above = (1.0 + outcome.error_worst[:, 0]).tolist()
        assert below > 0.5**0.5 > above


@pytest.mark.source
def test_published_differentiator() -> None:
    """C37: printed 926 adds magnitudes; a phasor gives 996.8423962 at -175.4456 degree."""
    topology = LIBRARY["differentiator"]
    values = {"c1": 2e-6, "r1": 0.0, "r2": 1e5, "c2": 0.0, "r_load": np.inf}
    figures = np.array([figures_of(a_ol=1e-3)]).T
    stages, outcome, _, _ = screened(derive(topology), stages_of(topology, [values], [1e4], 0.0), figures)
    assert outcome.phase is not None
    assert stages.gain_ideal[0] == pytest.approx(12566.37061, abs=1e-5)
    assert stages.gain_ideal[0] * (1.0 + outcome.error_nominal[0, 0]) == pytest.approx(996.8423962, abs=1e-7)
    assert outcome.phase[0, 0] - 90.0 == pytest.approx(-175.4456, abs=1e-4)


@pytest.mark.source
def test_published_integrator() -> None:
    """C35: 0.637 is the ideal integrator's; with its feedback resistor the stage has 0.635333619 at 2.5 kHz."""
    topology = LIBRARY["integrator"]
    values = {"r1": 1e4, "r2": 1e5, "c1": 1e-8, "r_load": np.inf}
    figures = np.array([figures_of(a_ol=1 / 2e5, gbw=1e-6)]).T
    stages, outcome, _, _ = screened(derive(topology), stages_of(topology, [values], [2500.0], 0.0), figures)
    assert stages.gain_ideal[0] == pytest.approx(0.635333619, abs=1e-9)
    assert stages.gain_ideal[0] * (1.0 + outcome.error_nominal[0, 0]) == pytest.approx(0.634322702, abs=1e-9)
