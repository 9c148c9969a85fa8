"""Corners left out by proved signs: never one that matters, by every corner of the same screen and by an oracle."""

from __future__ import annotations

import random
from fractions import Fraction
from math import prod

import numpy as np
import pytest
from numpy.typing import NDArray

import oracle
from gainassay.errors import InputError
from gainassay.forms import coefficients, nodal
from gainassay.forms.form import Form, derive
from gainassay.forms.library import library
from gainassay.forms.slopes import Polynomial
from gainassay.forms.topology import Topology
from gainassay.screen.boxes import StageBox, with_tolerances
from gainassay.screen.corners import StageSide, active_sets, elements_error, part_side, stage_side
from gainassay.screen.kernel import UNBOUNDED, Outcome, screen
from gainassay.screen.signs import bounds, reach

LIBRARY = library()
SINGLE = {name: topology for name, topology in LIBRARY.items() if len(topology.amplifiers) == 1}
UP_TO_TWO = {name: topology for name, topology in LIBRARY.items() if len(topology.amplifiers) <= 2}
INSIDE = 1_000

Array = NDArray[np.float64]


def boxes(
    topology: Topology, rng: np.random.Generator, count: int, decades: tuple[float, float], tolerances: list[float]
) -> StageBox:
    """Random stages; four optional elements in ten are absent."""
    values = 10.0 ** rng.uniform(*decades, (len(topology.elements), count))
    for row, element in zip(values, topology.elements, strict=True):
        if element.absent != "error":
            row[rng.random(count) < 0.4] = {"open": np.inf, "short": 0.0}[element.absent]
    chosen = np.where(np.isfinite(values) & (values > 0.0), rng.choice(tolerances, values.shape), 0.0)
    return with_tolerances(values, chosen, np.full(count, 1e-3), np.full(count, np.nan))


def wide_parts(rng: np.random.Generator, count: int) -> Array:
    """Limits of parts down to an A_OL of 100, r_id of 10 kohm, and up to an r_o of 1 kohm."""
    decades = [-rng.uniform(2, 6, count), -rng.uniform(4, 9, count), rng.uniform(0.5, 3, count)]
    return np.asarray(10.0 ** np.array(decades))


def screened(form: Form, side: StageSide, limits: Array) -> Outcome:
    return screen(side, part_side(form, limits, limits, np.zeros(limits.shape, np.uint8)), active_sets(form))


def corners(side: StageSide) -> NDArray[np.intp]:
    found = np.zeros(len(side.limits), np.intp)
    for plan in side.plans:
        found[plan.stages] = len(plan.corners)
    return found


@pytest.mark.parametrize("topology", UP_TO_TWO.values(), ids=UP_TO_TWO)
@pytest.mark.parametrize("seed", range(2))
def test_equals_the_visit_of_every_corner(topology: Topology, seed: int) -> None:
    rng = np.random.default_rng(seed)
    form = derive(topology)
    box = boxes(topology, rng, 40 if topology.name in SINGLE else 4, (1.0, 6.0), [0.0, 1e-3, 1e-2, 0.05, 0.2])
    limits = wide_parts(rng, 6)
    few, every = stage_side(form, box, reach(form, limits)), stage_side(form, box)
    found, whole = screened(form, few, limits), screened(form, every, limits)
    assert ((found.corner == UNBOUNDED) == (whole.corner == UNBOUNDED)).all()
    assert found.error_worst == pytest.approx(whole.error_worst, rel=1e-12, abs=1e-15, nan_ok=True)
    # The corners visited are some of all corners, with the same bits at each.
    bounded = found.corner != UNBOUNDED
    assert (np.abs(found.error_worst) <= np.abs(whole.error_worst))[bounded].all()
    assert np.abs(elements_error(few)) == pytest.approx(np.abs(elements_error(every)), rel=1e-12, nan_ok=True)
    assert (few.matters == every.matters).all()
    assert (few.regular == every.regular).all()
    assert (corners(few) <= corners(every)).all()


def test_a_stage_of_three_amplifiers_needs_few_corners_and_equals_the_visit_of_every_one() -> None:
    """Its slopes are too long to form: leading terms are bounded, the others by their magnitudes."""
    form, rng = derive(LIBRARY["instrumentation_3"]), np.random.default_rng(0)
    assert not all(slope.is_whole for slope in form.slopes)
    box = boxes(LIBRARY["instrumentation_3"], rng, 6, (3.0, 5.5), [1e-3])
    tolerances = tolerances_of(box)
    for column in tolerances.T:  # every corner of eight elements would take too long to visit
        column[rng.permutation(8)[:4]] = 0.0
    box = with_tolerances(box.values, tolerances, box.limits, box.targets)
    limits = np.array([[1e-4, 1e-6], [1e-6, 1e-9], [100.0, 20.0]])
    few, every = stage_side(form, box, reach(form, limits)), stage_side(form, box)
    found, whole = screened(form, few, limits), screened(form, every, limits)
    assert found.error_worst == pytest.approx(whole.error_worst, rel=1e-12)
    assert (few.matters == every.matters).all()
    assert corners(few).max() <= 20
    assert corners(every).min() > 500


def random_network(rng: random.Random) -> Topology:
    """Two to five nodes, one amplifier, resistors anywhere; many make no sense, and say so."""
    nodes = ["in", "out", *(f"n{i}" for i in range(rng.randint(0, 3)))]
    pairs = [(a, b) for i, a in enumerate([*nodes, "ground"]) for b in [*nodes, "ground"][i + 1 :]]
    chosen = rng.sample(pairs, min(len(pairs), rng.randint(2, 6)))
    amplifiers = [(rng.choice(["ground", *nodes]), rng.choice(nodes), "out")]
    return oracle.network({f"r{i}": pair for i, pair in enumerate(chosen)}, amplifiers)


def tolerances_of(box: StageBox) -> Array:
    return box.ends()[1] - 1.0


def oracle_worst(topology: Topology, values: Array, tolerances: Array, limits: Array) -> tuple[float, float]:
    """Largest error in magnitude at all corners and inside, by nodal solves of each."""
    count, rng = len(values), np.random.default_rng(11)
    ends = np.stack(np.meshgrid(*[[0.0, 1.0]] * (count + 3)), axis=-1).reshape(-1, count + 3)
    points = np.vstack([ends, rng.uniform(0, 1, (INSIDE, count + 3))])
    ohms = {
        element.name: value * (1.0 + tolerance * (2.0 * share - 1.0))
        for element, value, tolerance, share in zip(topology.elements, values, tolerances, points.T, strict=False)
    }
    with np.errstate(divide="ignore"):
        a_ol, r_id, r_o = (
            1.0 / (limits[0] * points[:, -3]),
            1.0 / (limits[1] * points[:, -2]),
            limits[2] * points[:, -1],
        )
    gain = oracle.gains(topology, ohms, [(a_ol, r_id, r_o)])
    nominal = dict(zip((element.name for element in topology.elements), values.tolist(), strict=True))
    error = np.abs(gain / float(oracle.gain(topology, nominal, oracle.IDEAL)) - 1.0)
    return float(error[: len(ends)].max()), float(error[len(ends) :].max())


@pytest.mark.oracle
def test_random_networks_with_wide_boxes_and_several_parts() -> None:
    rng, numbers = random.Random(20261202), np.random.default_rng(20261202)
    compared = fewer = 0
    for _ in range(300):
        topology = random_network(rng)
        try:
            form = derive(topology)
        except InputError:
            continue
        box = boxes(topology, numbers, 3, (2.0, 5.0), [0.0, 0.01, 0.2])
        limits = wide_parts(numbers, 3)
        side = stage_side(form, box, reach(form, limits))
        outcome = screened(form, side, limits)
        fewer += int((corners(side) < corners(stage_side(form, box)))[side.regular].sum())
        for s, p in np.argwhere(outcome.corner != UNBOUNDED).tolist():
            worst, inside = oracle_worst(topology, box.values[:, s], tolerances_of(box)[:, s], limits[:, p])
            found = abs(float(outcome.error_worst[s, p]))
            assert found == pytest.approx(worst, rel=1e-8, abs=1e-10), (topology, box.values[:, s], limits[:, p])
            assert inside <= found * (1.0 + 1e-8) + 1e-10, (topology, box.values[:, s], limits[:, p])
            compared += 1
    assert compared > 300
    assert fewer > 100


FOUR_CORNERS = {"all_pass", "follower_isolated"}
"""At 0 Hz the ideal gain is 1 whatever r1 and r_iso are: which way those move the gain depends on the parts."""

NO_GAIN = {"differentiator", "non_inverting_ac"}
"""At 0 Hz."""


@pytest.mark.parametrize("topology", SINGLE.values(), ids=SINGLE)
def test_most_stages_need_two_corners(topology: Topology) -> None:
    rng = np.random.default_rng(3)
    form = derive(topology)
    box = boxes(topology, rng, 100, (3.0, 5.5), [1e-3])
    limits = 10.0 ** np.array([-rng.uniform(3.5, 6.5, 50), -rng.uniform(5, 10, 50), rng.uniform(0.5, 3, 50)])
    side = stage_side(form, box, reach(form, limits))
    found = corners(side)[side.regular]
    assert (not found.size) == (topology.name in NO_GAIN)
    assert set(found.tolist()) <= ({4} if topology.name in FOUR_CORNERS else {2})


def value_of(terms: Polynomial, at: list[Fraction]) -> Fraction:
    return sum(
        (
            value * prod((x**e for x, e in zip(at, exponents, strict=True)), start=Fraction(1))
            for value, exponents in terms
        ),
        start=Fraction(0),
    )


@pytest.mark.parametrize("topology", UP_TO_TWO.values(), ids=UP_TO_TWO)
def test_slopes_have_the_sign_of_the_gains_change(topology: Topology) -> None:
    rng = random.Random(topology.name)
    form, gain = derive(topology), nodal.derive(topology)
    count = len(form.elements) + len(form.departures)

    def whole(at: list[Fraction]) -> tuple[Fraction, Fraction]:
        top, bottom = (
            sum(
                (
                    value * prod((x for i, x in enumerate(at) if mask >> i & 1), start=Fraction(1))
                    for mask, value in side
                ),
                start=Fraction(0),
            )
            for side in (gain.numerator, gain.denominator)
        )
        return top, bottom

    for _ in range(3):
        at = [Fraction(rng.randint(1, 1000), 100) for _ in range(count)]
        at[len(form.elements) :] = [Fraction(1, rng.randint(10, 10**4)) for _ in form.departures]
        top, bottom = whole(at)
        for place, slope in enumerate(form.slopes):
            further = [x * 3 if i == place else x for i, x in enumerate(at)]
            more, below = whole(further)
            change = (more * bottom - top * below) / (further[place] - at[place])
            expected = (change > 0) - (change < 0)
            if slope.terms:
                assert not slope.sign
                found = value_of(slope.terms, at)
                assert (found > 0) - (found < 0) == expected
            else:
                assert expected in (0, slope.sign)


def test_bounds_hold_everywhere_inside() -> None:
    rng = np.random.default_rng(2)
    topology = LIBRARY["inverting_bridged_t"]
    form = derive(topology)
    limits = wide_parts(rng, 4)
    box = boxes(topology, rng, 30, (1.0, 6.0), [0.0, 0.05, 0.3])
    pairs = coefficients.at_dc(form, box.values)
    low, high = (coefficients.Pairs(pairs.y, pairs.z * (1.0 + end * tolerances_of(box))) for end in (-1.0, 1.0))
    reached = reach(form, limits)
    assert reached.slopes
    for place, polynomial, _ in reached.slopes:
        least, most = bounds(polynomial, low, high)
        terms = form.slopes[place].terms
        for _ in range(20):
            z = pairs.z * (1.0 + tolerances_of(box) * rng.uniform(-1, 1, pairs.z.shape))
            departures = limits[:, rng.integers(4)] * rng.choice([0.0, 1.0, rng.uniform()], 3)
            found = np.zeros(30)
            for value, exponents in terms:
                product = np.full(30, float(value)) * np.prod(departures ** np.array(exponents[len(form.elements) :]))
                for i, degree in enumerate(polynomial.degrees):
                    product *= pairs.y[i] ** exponents[i] * z[i] ** (degree - exponents[i])
                found += product
            slack = 1e-12 * np.maximum(np.abs(least), np.abs(most))
            assert (least <= found + slack).all()
            assert (found <= most + slack).all()


def test_a_table_with_poorer_parts_changes_no_number_beyond_rounding() -> None:
    topology = LIBRARY["inverting_t"]
    form, rng = derive(topology), np.random.default_rng(4)
    box = boxes(topology, rng, 30, (2.0, 6.0), [0.01, 0.1])
    limits = wide_parts(rng, 5)
    poorer = np.hstack([limits, [[0.2], [1e-3], [1e4]]])
    alone = screened(form, stage_side(form, box, reach(form, limits)), limits)
    beside = screened(form, stage_side(form, box, reach(form, poorer)), limits)
    assert alone.error_worst == pytest.approx(beside.error_worst, rel=1e-12)


def test_numbers_beyond_all_use_are_not_leaned_on() -> None:
    form = derive(LIBRARY["inverting"])
    values = np.array([[0.0], [1e-300], [1e5], [np.inf]])
    box = with_tolerances(values, np.array([[0.0], [0.1], [0.1], [0.0]]), np.ones(1), np.array([np.nan]))
    limits = np.array([[1e-5], [1e-7], [50.0]])
    assert corners(stage_side(form, box, reach(form, limits)))[0] == corners(stage_side(form, box))[0]
