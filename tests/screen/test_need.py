"""Needs put back: by the kernel at every corner, by an independent nodal solver, and where a hand can solve them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

import oracle
from gainassay.contracts.moves import MOVES, TOLERANCE
from gainassay.forms.departures import BASIC
from gainassay.forms.form import Form, derive
from gainassay.forms.library import library
from gainassay.forms.topology import Topology
from gainassay.screen.boxes import StageBox, with_tolerances
from gainassay.screen.boxes import box as box_of
from gainassay.screen.corners import active_sets, part_side, stage_side
from gainassay.screen.kernel import worst_errors
from gainassay.screen.need import Asked, bearable, bearable_spread, last, needed, paired_errors, passing
from gainassay.screen.verdicts import Rules

LIBRARY = library()
AT_DC = {name: topology for name, topology in LIBRARY.items() if name not in ("differentiator", "non_inverting_ac")}
STEP = 1e-6
"""By how much one step worse is."""

Array = NDArray[np.float64]


def boxes(topology: Topology, rng: np.random.Generator, count: int) -> StageBox:
    """Random stages; two optional elements in five are absent, and a few resistors have a tolerance."""
    most = 4 if len(topology.amplifiers) < 3 else 2  # or the visit of every corner takes too long
    values = 10.0 ** rng.uniform(3, 5, (len(topology.elements), count))
    tolerances = rng.choice([0.0, 1e-3, 1e-2], values.shape)
    for row, spread, element in zip(values, tolerances, topology.elements, strict=True):
        if element.absent != "error":
            row[rng.random(count) < 0.4] = {"open": np.inf, "short": 0.0}[element.absent]
        spread[~np.isfinite(row) | (row == 0.0) | (element.kind != "resistor")] = 0.0
    for column in tolerances.T:
        column[rng.permutation(len(column))[most:]] = 0.0
    return with_tolerances(values, tolerances, 10.0 ** rng.uniform(-3, -1, count), np.full(count, np.nan))


def some_parts(rng: np.random.Generator, count: int) -> Array:
    decades = [-rng.uniform(3, 6, count), -rng.uniform(5, 9, count), rng.uniform(0.5, 3, count)]
    return np.asarray(10.0 ** np.array(decades))


def tolerances_of(box: StageBox) -> Array:
    return box.ends()[1] - 1.0


def scaled(box: StageBox, factor: Array) -> StageBox:
    return with_tolerances(box.values, tolerances_of(box) * factor, box.limits, box.targets)


def as_departure(kind: int, figures: Array) -> Array:
    return np.asarray(1.0 / figures if BASIC[kind].reciprocal else figures)


def worst_at_every_corner(form: Form, box: StageBox, worst: Array) -> Array:
    """Of each stage with its own part, nothing left out; nan where there is no finite bound."""
    parts = part_side(form, worst, worst, np.zeros(worst.shape, np.uint8))
    return np.abs(np.diagonal(worst_errors(stage_side(form, box), parts, active_sets(form))[0]))


def corner_errors(topology: Topology, box: StageBox, s: int, worst: Array) -> Array:
    """Errors of a stage at all corners of its tolerances and of its part, by nodal solves alone."""
    values, tolerances = box.values[:, s], tolerances_of(box)[:, s]
    moved, count = np.flatnonzero(tolerances), 3 * len(topology.amplifiers)
    ends = np.stack(np.meshgrid(*[[-1.0, 1.0]] * len(moved), *[[0.0, 1.0]] * count), axis=-1)
    points = ends.reshape(-1, len(moved) + count)
    cases = np.repeat(values[:, None], len(points), axis=1)
    cases[moved] *= 1.0 + tolerances[moved, None] * points[:, : len(moved)].T
    departures = points[:, len(moved) :].T.reshape(-1, 3, len(points)) * worst[:, None]
    at_dc = {"capacitor": oracle.OPEN, "inductor": 0.0}
    for case, element in zip(cases, topology.elements, strict=True):
        case[:] = at_dc.get(element.kind, case)
    names = [element.name for element in topology.elements]
    with np.errstate(divide="ignore"):
        parts = [(1.0 / a, 1.0 / g_id, r_o) for a, g_id, r_o in departures]
    gains = oracle.gains(topology, dict(zip(names, cases, strict=True)), parts)
    at_nominal = [at_dc.get(e.kind, float(value)) for e, value in zip(topology.elements, values, strict=True)]
    return np.asarray(
        gains / float(oracle.gain(topology, dict(zip(names, at_nominal, strict=True)), oracle.IDEAL)) - 1.0
    )


@pytest.mark.parametrize("topology", AT_DC.values(), ids=AT_DC)
def test_a_need_put_back_just_passes_at_every_corner_and_one_step_worse_fails(topology: Topology) -> None:
    rng, form = np.random.default_rng(5), derive(topology)
    few = len(topology.amplifiers) > 2
    box, table = boxes(topology, rng, 3 if few else 10), some_parts(rng, 2 if few else 5)
    found = needed(Asked(form, box, table[:, None, :], table))
    solved = 0
    for kind, departure in enumerate(BASIC):
        for p, limits in enumerate(table.T):
            figures = found[kind, :, p]
            worst = np.repeat(limits[:, None], len(box.limits), axis=1)
            worst[kind] = np.where(np.isnan(figures), 0.0, as_departure(kind, figures))
            error = worst_at_every_corner(form, box, worst)
            worst[kind] *= 1.0 + STEP
            beyond = worst_at_every_corner(form, box, worst)
            none, any_will_do = np.isnan(figures), figures == departure.poorest
            assert not (error[none] < box.limits[none]).any()
            assert (error <= box.limits)[~none].all()
            solved += int((just := ~none & ~any_will_do).sum())
            assert error[just] == pytest.approx(box.limits[just], rel=1e-9)
            assert not (beyond[just] <= box.limits[just]).any()
    assert solved > len(box.limits)


@pytest.mark.oracle
@pytest.mark.parametrize("topology", [t for t in AT_DC.values() if len(t.amplifiers) < 3], ids=lambda t: t.name)
def test_a_need_put_back_is_at_the_limit_by_nodal_solves(topology: Topology) -> None:
    rng, form = np.random.default_rng(7), derive(topology)
    box, table = boxes(topology, rng, 4), some_parts(rng, 1)
    found = needed(Asked(form, box, table[:, None, :], table))[:, :, 0]
    for kind, s in np.argwhere(np.isfinite(found)).tolist():
        worst = table[:, 0].copy()
        worst[kind] = as_departure(kind, found[kind])[s]
        largest = float(np.abs(corner_errors(topology, box, s, worst)).max())
        if found[kind, s] == BASIC[kind].poorest:
            assert largest <= box.limits[s]
        else:
            assert largest == pytest.approx(box.limits[s], rel=1e-7)


def asked(name: str, ohms: dict[str, float], limit: float, others: tuple[float, float, float], **more: float) -> Asked:
    """One stage with one part; `more` may hold a `tolerance` and a `target`."""
    form = derive(LIBRARY[name])
    values = np.array([[ohms[element]] for element in form.elements])
    spread = np.where(np.isfinite(values) & (values > 0.0), more.get("tolerance", 0.0), 0.0)
    box = with_tolerances(values, spread, np.array([limit]), np.array([more.get("target", np.nan)]))
    limits = np.array(others).reshape(3, 1, 1)
    return Asked(form, box, limits, limits[:, 0])


NON_INVERTING = {"r_source": 0.0, "r1": 1e3, "r2": 9e3, "r_load": np.inf}
FOLLOWER = {"r_source": 0.0, "r2": 0.0, "r_load": np.inf}


def named(name: str, ohms: dict[str, float]) -> dict[str, float]:
    return {element: ohms[element] for element in derive(LIBRARY[name]).elements}


def test_a_follower_without_resistors() -> None:
    """Its error is -1/(1 + A_OL), so 0.1 % takes an A_OL of 999; with r_id infinite and no r_o, any will do."""
    found = needed(asked("follower", named("follower", FOLLOWER), 1e-3, (1e-6, 0.0, 0.0)))
    assert found[0, 0, 0] == pytest.approx(999.0, rel=1e-9)
    assert found[1:, 0, 0].tolist() == [1.0, 1e6]


@pytest.mark.parametrize(("off", "side"), [(1.003, -1.0), (0.998, -1.0), (1.0, -1.0)])
def test_a_target_that_is_not_the_ideal_gain(off: float, side: float) -> None:
    """The gain is 10/(1 + 10/A_OL); with the ideal gain `off` times the target, the limit is met at 1 % below it."""
    case = asked("non_inverting", NON_INVERTING, 0.01, (1e-6, 0.0, 0.0), target=10.0 / off)
    expected = 10.0 / (off / (1.0 + side * 0.01) - 1.0)
    assert needed(case)[0, 0, 0] == pytest.approx(expected, rel=1e-9)


def test_no_part_can_pass() -> None:
    case = asked("non_inverting", NON_INVERTING, 1e-3, (1e-6, 1e-9, 10.0), tolerance=0.01)
    assert np.isnan(needed(case)).all()
    factor = bearable_spread(case)
    assert 0.0 < factor[0] < 0.1
    assert np.abs(paired_errors(case.form, scaled(case.box, factor), case.others[:, :, 0])) == pytest.approx(
        1e-3, rel=1e-9
    )
    wider = scaled(case.box, factor * (1.0 + STEP))
    assert np.abs(paired_errors(case.form, wider, case.others[:, :, 0]))[0] > 1e-3


def test_no_tolerance_helps_where_the_target_is_too_far_off() -> None:
    case = asked("non_inverting", NON_INVERTING, 1e-3, (0.0, 0.0, 0.0), tolerance=0.01, target=10.1)
    assert np.isnan(bearable_spread(case)).all()


def test_the_guard_band_is_taken_off() -> None:
    whole = asked("non_inverting", NON_INVERTING, 0.01, (1e-6, 1e-8, 50.0))
    less = replace(whole, box=passing(whole.box, Rules(guard_band=0.2)))
    stricter = asked("non_inverting", NON_INVERTING, 0.008, (1e-6, 1e-8, 50.0))
    assert needed(less) == pytest.approx(needed(stricter), rel=1e-12)
    assert (needed(less)[:2] > needed(whole)[:2]).all()


def test_a_gain_that_has_no_bound_has_no_need() -> None:
    """At some corner the positive feedback outweighs the negative."""
    topology = oracle.network(
        {"r1": ("in", "plus"), "r2": ("plus", "out"), "r3": ("minus", "out"), "r4": ("minus", "ground")},
        [("plus", "minus", "out")],
    )
    form, values = derive(topology), np.array([[1000.0], [1010.0], [1000.0], [1000.0]])
    box = with_tolerances(values, np.full((4, 1), 0.02), np.full(1, 5.0), np.array([np.nan]))
    limits = np.array([[1e-6], [0.0], [0.0]])
    case = Asked(form, box, limits[:, :, None], limits)
    assert np.isnan(needed(case)).all()
    # With smaller tolerances it has a bound, and a need.
    factor = bearable_spread(case)
    assert 0.0 < factor[0] < 1.0
    assert np.abs(paired_errors(form, scaled(box, factor), limits)) == pytest.approx(5.0, rel=1e-9)
    assert np.isfinite(needed(replace(case, box=scaled(box, factor * 0.9)))).all()


def test_what_a_better_table_proves_less_of_is_found_all_the_same() -> None:
    """A row that passes with room to spare needs less than any part of the table gives: beyond the table's reach."""
    form, rng = derive(LIBRARY["non_inverting_t"]), np.random.default_rng(3)
    box, parts = boxes(LIBRARY["non_inverting_t"], rng, 20), some_parts(rng, 4) * 1e-3
    poorer = np.hstack([parts, [[0.1], [1e-3], [1e5]]])
    near, far = (needed(Asked(form, box, parts[:, None, :], table)) for table in (parts, poorer))
    assert near == pytest.approx(far, rel=1e-9, nan_ok=True)
    assert (np.isfinite(near) & (near != np.array([1.0, 1.0, 1e6])[:, None, None])).any()


@pytest.mark.parametrize("name", ["inverting_t", "composite"])
def test_no_bit_depends_on_the_company(name: str) -> None:
    form, rng = derive(LIBRARY[name]), np.random.default_rng(9)
    box, table = boxes(LIBRARY[name], rng, 5), some_parts(rng, 4)
    whole = needed(Asked(form, box, table[:, None, :], table))
    for s in range(5):
        for p in range(4):
            alone = Asked(form, box.part(slice(s, s + 1)), table[:, None, p : p + 1], table)
            assert needed(alone).tobytes() == whole[:, s : s + 1, p : p + 1].tobytes()
    own = table[:, :, None][:, [0, 1, 2, 3, 0]]
    paired = needed(Asked(form, box, own, table))[:, :, 0]
    assert paired.tobytes() == whole[:, range(5), [0, 1, 2, 3, 0]].tobytes()


def test_a_quantity_that_no_part_states_is_looked_for_all_the_same() -> None:
    case = asked("inverting", {"r_source": 0.0, "r1": 1e3, "r2": 1e4, "r_load": 1e3}, 1e-3, (1e-5, 0.0, 0.0))
    limit = float(bearable(case, 2)[0, 0])
    assert 0.0 < limit < 1e6
    worst = np.array([[1e-5], [0.0], [limit]])
    assert np.abs(paired_errors(case.form, case.box, worst)) == pytest.approx(1e-3, rel=1e-9)


def test_bisection_ends_at_neighbouring_floats() -> None:
    upto = np.array([1.0, 1e300, 3.0])
    found = last(lambda x: np.asarray(x <= np.array([0.1, 1e-300, 2.5])), upto)
    assert found.tolist() == [0.1, 1e-300, 2.5]


@pytest.mark.parametrize("name", ["inverting", "difference", "non_inverting_t", "instrumentation_2"])
def test_a_stage_whose_resistors_track_passes_with_what_it_needs(name: str) -> None:
    """What may lie beyond the corners is counted: put back, the error is the limit."""
    rng, form = np.random.default_rng(5), derive(LIBRARY[name])
    values = 10.0 ** rng.uniform(3, 4.5, (len(form.elements), 3))
    spreads = np.zeros((len(MOVES), *values.shape))
    spreads[TOLERANCE] = 0.02
    network = np.zeros(values.shape, np.int8)
    network[-1] = -1
    ratios = np.full((len(MOVES), 1, 3), np.nan)
    ratios[TOLERANCE] = 1e-3
    box = box_of(values, spreads, np.full(3, 0.02), np.full(3, np.nan), network, ratios)
    limits = np.array([[1e-4], [1e-6], [200.0]])
    needs = needed(Asked(form, box, limits[:, :, None], limits))[:, :, 0]
    for kind, departure in enumerate(BASIC):
        assert (needs[kind] != departure.poorest).any()
        worst = np.repeat(limits, 3, axis=1)
        worst[kind] = as_departure(kind, needs[kind])
        errors = np.abs(paired_errors(form, box, worst))
        assert (errors <= 0.02).all()
        asks = needs[kind] != departure.poorest
        assert errors[asks] == pytest.approx(0.02, rel=1e-9)
