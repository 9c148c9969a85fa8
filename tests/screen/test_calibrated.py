"""Calibrated stages against nodal solves before and after: nothing drawn inside exceeds the worst case."""

from __future__ import annotations

import random

import numpy as np
import pytest
from numpy.typing import NDArray

import oracle
from gainassay.contracts.moves import MOVES
from gainassay.forms import soundness
from gainassay.forms.departures import BASIC
from gainassay.forms.form import Form, derive
from gainassay.forms.library import library
from gainassay.forms.topology import Topology
from gainassay.screen import calibrated
from gainassay.screen.boxes import StageBox, box
from gainassay.screen.corners import StageSide, term_names
from gainassay.screen.kernel import UNBOUNDED, Outcome
from gainassay.screen.signs import reach

LIBRARY = library()
INSIDE = 20_000
ALL = slice(None)

Array = NDArray[np.float64]


def screened(form: Form, one: StageBox, room: Array, limits: Array, change: Array) -> tuple[StageSide, Outcome, Array]:
    """Stages and parts, with the terms of each pair; shape (terms, stages, parts)."""
    stages = calibrated.stage_side(form, one, reach(form, limits, one.memberships()))
    parts = calibrated.part_side(form, room, limits, change, np.zeros(limits.shape, np.uint8))
    outcome = calibrated.screen(form, stages, parts)
    terms = np.array(list(calibrated.account(form, stages, parts, ALL, ALL, outcome)))
    return stages, outcome, terms


def ends_or_inside(rng: np.random.Generator, shape: tuple[int, int]) -> Array:
    """Shares from 0 to 1, at an end as often as not."""
    return np.where(rng.random(shape) < 0.7, rng.random(shape) < 0.5, rng.random(shape))


def departing(rng: np.random.Generator, room: Array, limits: Array, change: Array) -> tuple[list[Array], list[Array]]:
    """Data-sheet numbers of one amplifier at calibration and afterwards, as the columns allow."""
    before: list[Array] = []
    after: list[Array] = []
    for place, departure in enumerate(BASIC):
        share, later, turn = ends_or_inside(rng, (3, INSIDE))
        c = change[place, 0]
        with np.errstate(divide="ignore"):
            x = room[place, 0] * share
            if np.isinf(c):
                y = limits[place, 0] * later
            else:
                factor = 1.0 + c * (2.0 * turn - 1.0)
                y = np.minimum(x / factor if departure.reciprocal else x * factor, limits[place, 0])
            for value, found in ((x, before), (y, after)):
                found.append(1.0 / value if departure.reciprocal else value)
    return before, after


@pytest.mark.oracle
@pytest.mark.parametrize("topology", LIBRARY.values(), ids=LIBRARY)
@pytest.mark.parametrize("seed", range(3))
def test_nothing_drawn_exceeds_the_worst_case(topology: Topology, seed: int) -> None:
    rng, generator = random.Random(f"{topology.name} {seed} calibrated"), np.random.default_rng(seed)
    form = derive(topology)
    depends = any(soundness.sign(form.loadings[place]) == 0 for place in form.loops())
    ohms = oracle.random_ohms(topology, rng, *((1e4, 1.0001e4) if depends else (1e3, 1e5)))
    values = np.array([ohms[name] for name in form.elements])
    if float(oracle.gain(topology, ohms, oracle.IDEAL)) == 0.0:
        pytest.skip("no ideal gain at 0 Hz")
    scale = 1e-3 if depends else 1.0
    present = np.isfinite(values) & (values > 0)
    toleranced = present & (np.cumsum(present) <= (7 if len(topology.amplifiers) == 1 else 4))
    spreads = np.where(present, [[0.01], [rng.choice([1e-3, 5e-3])], [rng.choice([0.0, 2e-3])]], 0.0) * scale
    spreads[0, ~toleranced] = 0.0
    room = np.array([[10.0 ** -rng.uniform(3, 6)], [10.0 ** -rng.uniform(5, 8)], [10.0 ** rng.uniform(0, 2.5)]])
    limits = room * np.array([[rng.choice([1.0, 3.0])] for _ in BASIC])
    change = np.array([[rng.choice([0.0, 0.02, 0.3, np.inf])] for _ in BASIC])
    one = box(values[:, None], spreads[:, :, None], np.ones(1), np.full(1, np.nan))
    _, outcome, terms = screened(form, one, room, limits, change)
    found = float(outcome.error_worst[0, 0])
    assert outcome.corner[0, 0] != UNBOUNDED

    count = len(values)
    held = 1.0 + spreads[0][:, None] * (2.0 * ends_or_inside(generator, (count, INSIDE)) - 1.0)
    moved = held.copy()
    for move in range(1, len(MOVES)):
        moved *= 1.0 + spreads[move][:, None] * (2.0 * ends_or_inside(generator, (count, INSIDE)) - 1.0)
    drawn = [departing(generator, room, limits, change) for _ in topology.amplifiers]
    before, after = (
        oracle.gains(
            topology,
            {name: value * factor for name, value, factor in zip(form.elements, values, factors, strict=True)},
            [(part[when][0], part[when][1], part[when][2]) for part in drawn],
        )
        for when, factors in ((0, held), (1, moved))
    )
    # The solves are good to some 1e-12 of the gain.
    assert np.abs(after / before - 1.0).max() <= abs(found) * (1.0 + 1e-9) + 1e-10
    assert terms[:, 0, 0].sum() == pytest.approx(found, abs=1e-12 * np.abs(terms).sum() + 1e-15)
    assert float(outcome.dominant_value[0, 0]) == terms[int(outcome.dominant[0, 0]), 0, 0]


def follower(room: float, limit: float, change: float) -> tuple[float, Array]:
    form = derive(LIBRARY["follower"])
    values = np.array([{"open": np.inf, "short": 0.0}[e.absent] for e in LIBRARY["follower"].elements])
    nothing = np.zeros((len(MOVES), len(values), 1))
    one = box(values[:, None], nothing, np.ones(1), np.full(1, np.nan))
    limits = [np.array([[a], [0.0], [0.0]]) for a in (room, limit)]
    changes = np.array([[change], [np.inf], [np.inf]])
    _, outcome, terms = screened(form, one, limits[0], limits[1], changes)
    return float(outcome.error_worst[0, 0]), terms[:, 0, 0]


@pytest.mark.oracle
def test_a_follower_feels_the_change_of_its_open_loop_gain_alone() -> None:
    """gain = A/(1 + A): from A = 1000 down by a fifth to 800, and where nothing is known from ideal down to 1000."""
    worst, terms = follower(1e-3, 1.0, 0.2)
    assert worst == pytest.approx((800 / 801) / (1000 / 1001) - 1, rel=1e-12)
    assert np.abs(terms).sum() == pytest.approx(abs(worst), rel=1e-12)
    assert follower(1e-3, 1e-3, np.inf)[0] == pytest.approx((1001 / 1000) - 1, rel=1e-12)
    assert follower(1e-3, 2e-3, np.inf)[0] == pytest.approx(-2e-3 / 1.002, rel=1e-12)
    assert follower(1e-3, 1e-3, 0.0)[0] == 0.0


@pytest.mark.oracle
def test_a_part_may_be_better_than_its_limits_at_calibration() -> None:
    """1 + r2/r1 trimmed, then 1000 ppm of r2 more: with a part that never changes, the most if that is ideal.

    By hand: gain = G/(1 + G a), so that G to G' makes G'/G (1 + G a)/(1 + G' a) - 1, which falls as a rises.
    """
    topology = LIBRARY["non_inverting"]
    form = derive(topology)
    values = np.array([{"r1": 1e3, "r2": 9e4, "r_load": np.inf}.get(name, 0.0) for name in form.elements])
    is_r2 = np.array([name == "r2" for name in form.elements])
    spreads = np.where(is_r2, [[0.0], [1e-3], [0.0]], 0.0)[:, :, None]
    one = box(values[:, None], spreads, np.ones(1), np.full(1, np.nan))
    room = np.array([[1e-3], [0.0], [0.0]])
    _, outcome, _ = screened(form, one, room, room, np.zeros((3, 1)))
    assert abs(float(outcome.error_worst[0, 0])) == pytest.approx(0.09 / 91.0, rel=1e-12)
    before = np.array([91.0 / 1.091, 91.09 / 1.09109])
    assert abs(float(outcome.error_worst[0, 0])) > 1.08 * (before[1] / before[0] - 1.0)


@pytest.mark.oracle
def test_resistors_that_drift_apart_count_and_their_tolerance_does_not() -> None:
    """-r2/r1 trimmed at calibration: 25 ppm/K over 60 K apart in each is 1.0015/0.9985 - 1, whatever the tolerance."""
    topology = LIBRARY["inverting"]
    form = derive(topology)
    values = np.array([{"r1": 1e3, "r2": 1e4, "r_load": np.inf, "r_source": 0.0}[name] for name in form.elements])
    present = np.isfinite(values) & (values > 0)
    spreads = np.where(present, [[0.05], [1.5e-3], [0.0]], 0.0)[:, :, None]
    ideal = np.zeros((3, 1))
    one = box(values[:, None], spreads, np.ones(1), np.full(1, -10.5))
    stages, outcome, terms = screened(form, one, ideal, ideal, np.full((3, 1), np.inf))
    assert float(outcome.error_worst[0, 0]) == pytest.approx(1.0015 / 0.9985 - 1, rel=1e-12)
    named = dict(zip(term_names(form), terms[:, 0, 0].tolist(), strict=True))
    assert {name for name, value in named.items() if value} == {"r1.temperature", "r2.temperature"}
    assert stages.reference[0] == -10.5
    assert float(outcome.error_nominal[0, 0]) == 0.0
