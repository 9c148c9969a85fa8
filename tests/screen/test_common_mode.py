"""Common-mode resistances and CMRR: either sign of it, both inputs, and terms that several products make up."""

from __future__ import annotations

import random

import numpy as np
import pytest
from numpy.typing import NDArray

import oracle
from gainassay.forms import soundness
from gainassay.forms.cache import form_of
from gainassay.forms.departures import BASIC, DEPARTURES, derived_with
from gainassay.forms.form import derive
from gainassay.forms.library import library
from gainassay.forms.topology import Topology
from gainassay.screen import calibrated, monte_carlo, rss
from gainassay.screen.boxes import StageBox, with_tolerances
from gainassay.screen.corners import PartSide, StageSide, active_sets, figure_names, part_side, stage_side, term_names
from gainassay.screen.kernel import Outcome, account, nominal_account, screen
from gainassay.screen.monte_carlo import Lot
from gainassay.screen.need import Asked, needed, paired_errors
from gainassay.screen.signs import reach

LIBRARY = library()
FIGURES = 6
"""Of an amplifier, as `oracle.gains` takes them."""

POINTS = 2_000
ALL = slice(0, 1)


def limits_of(rng: random.Random) -> NDArray[np.float64]:
    """The departures of one part at their limits, in the order of `DEPARTURES`."""
    decades = [rng.uniform(-5, -2), rng.uniform(-7, -5), rng.uniform(0, 2.5), rng.uniform(-8, -6), rng.uniform(-5, -2)]
    return np.array([[10.0**decade] for decade in decades])


def box_of(topology: Topology, ohms: dict[str, float], tolerance: float, limit: float = 1.0) -> StageBox:
    values = np.array([[ohms[element.name]] for element in topology.elements])
    spreads = np.where(np.isfinite(values) & (values > 0.0), tolerance, 0.0)
    return with_tolerances(values, spreads, np.array([limit]), np.array([np.nan]))


def screened(topology: Topology, box: StageBox, limits: NDArray[np.float64]) -> tuple[StageSide, PartSide, Outcome]:
    form = form_of(topology, DEPARTURES)
    stages = stage_side(form, box, reach(form, limits))
    nominal = limits * np.array([[0.5], [0.5], [0.5], [0.5], [0.0]])
    parts = part_side(form, nominal, limits, np.zeros(limits.shape, np.uint8))
    return stages, parts, screen(stages, parts, active_sets(form))


def errors_at(
    topology: Topology, box: StageBox, limits: NDArray[np.float64], points: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Errors by nodal solves; points, of shape (points, elements + figures), lie between -1 and 1."""
    count = len(topology.elements)
    low, high = box.ends()
    shares = (points[:, :count].T + 1.0) / 2.0
    values = box.values * (low + (high - low) * shares)
    ohms = {
        e.name: np.where(np.isnan(row), box.values[place], row)
        for place, (e, row) in enumerate(zip(topology.elements, values, strict=True))
    }
    parts = []
    with np.errstate(divide="ignore"):
        for own in points[:, count:].T.reshape(-1, FIGURES, len(points)):
            a, g_id, r_o, g_icp, g_icn = (own[:5] + 1.0) / 2.0 * limits[[0, 1, 2, 3, 3]]
            parts.append((1.0 / a, 1.0 / g_id, r_o, 1.0 / g_icp, 1.0 / g_icn, 1.0 / (own[5] * limits[4])))
        ideal = float(
            oracle.gain(topology, {name: row[0] for name, row in zip(ohms, box.values, strict=True)}, oracle.IDEAL)
        )
        return oracle.gains(topology, ohms, parts) / ideal - 1.0


def drawn(topology: Topology, seed: str) -> tuple[StageBox, NDArray[np.float64]] | None:
    rng = random.Random(seed)
    form = derive(topology)
    depends = any(soundness.sign(form.loadings[place]) == 0 for place in form.loops())
    ohms = oracle.random_ohms(topology, rng, *((1e4, 1.0001e4) if depends else (1e3, 1e5)))
    if not oracle.gain(topology, ohms, oracle.IDEAL):
        return None
    return box_of(topology, ohms, 1e-5 if depends else 1e-2), limits_of(rng)


@pytest.mark.oracle
@pytest.mark.parametrize("topology", LIBRARY.values(), ids=LIBRARY)
def test_the_worst_case_against_corners_of_both_signs(topology: Topology) -> None:
    case = drawn(topology, f"{topology.name} common mode")
    if case is None:
        pytest.skip("no ideal gain at 0 Hz")
    box, limits = case
    stages, parts, outcome = screened(topology, box, limits)
    found = float(outcome.error_worst[0, 0])
    width = len(topology.elements) + FIGURES * len(topology.amplifiers)
    rng = np.random.default_rng(3)
    moving = box.own.moves()[:, 0]
    free = np.concatenate([moving, np.ones(width - len(moving), dtype=bool)])
    several = 1 << int(free.sum())
    if several <= 1 << 14:
        corners = -np.ones((several, width))
        corners[:, free] = 1.0 - 2.0 * (np.arange(several)[:, None] >> np.arange(free.sum()) & 1)
    else:
        corners = rng.choice([-1.0, 1.0], (POINTS, width))
    inside = rng.uniform(-1.0, 1.0, (POINTS, width))
    at_corners, at_others = (np.abs(errors_at(topology, box, limits, points)).max() for points in (corners, inside))
    assert max(at_corners, at_others) <= abs(found) * (1.0 + 1e-9) + 1e-11
    if several <= 1 << 14:
        assert abs(found) == pytest.approx(at_corners, rel=1e-9, abs=1e-11)
    form = form_of(topology, DEPARTURES)
    terms = np.array([term[0, 0] for term in account(stages, parts, active_sets(form), ALL, ALL, outcome)])
    names = term_names(form)
    assert len(terms) == len(names) == len(set(names))
    assert terms.sum() == pytest.approx(found, abs=1e-12 * np.abs(terms).sum())
    assert int(outcome.dominant[0, 0]) == int(np.abs(terms).argmax())
    assert float(outcome.dominant_value[0, 0]) == terms[np.abs(terms).argmax()]
    nominal = sum(float(term[0, 0]) for term in nominal_account(stages, parts))
    assert nominal == pytest.approx(float(outcome.error_nominal[0, 0]), rel=1e-9, abs=1e-15)


@pytest.mark.oracle
@pytest.mark.parametrize("decibel", [40.0, 70.0, 100.0])
def test_a_non_inverting_stage_in_closed_form(decibel: float) -> None:
    """With c = 1/CMRR and nothing else, v-(1 - c/2) = v+(1 + c/2): the gain is (1 + r2/r1) (1 + c/2)/(1 - c/2)."""
    c = 10.0 ** (-decibel / 20.0)
    topology = LIBRARY["non_inverting"]
    ohms = {"r_source": 0.0, "r1": 1e3, "r2": 9e3, "r_load": np.inf}
    values = {element.name: ohms[element.name] for element in topology.elements}
    limits = np.array([[0.0], [0.0], [0.0], [0.0], [c]])
    _, _, outcome = screened(topology, box_of(topology, values, 0.0), limits)
    assert float(outcome.error_worst[0, 0]) == pytest.approx((1.0 + c / 2.0) / (1.0 - c / 2.0) - 1.0, rel=1e-12)
    assert outcome.error_nominal[0, 0] == 0.0
    assert term_names(form_of(topology, DEPARTURES))[outcome.dominant[0, 0]] == "common_mode_rejection"


@pytest.mark.oracle
def test_common_mode_resistances_in_closed_form() -> None:
    """An ideal gain of 1 + r2/r1 with r_icm beside r1 is 1 + r2/(r1 || r_icm); that at the driven input is nothing."""
    topology = LIBRARY["non_inverting"]
    ohms = {"r_source": 0.0, "r1": 1e4, "r2": 9e4, "r_load": np.inf}
    limits = np.array([[0.0], [0.0], [0.0], [1e-8], [0.0]])
    box = box_of(topology, {element.name: ohms[element.name] for element in topology.elements}, 0.0)
    _, _, outcome = screened(topology, box, limits)
    assert float(outcome.error_worst[0, 0]) == pytest.approx(9e4 * 1e-8 / 10.0, rel=1e-12)
    fed = box_of(topology, {e.name: ohms[e.name] or 1e5 for e in topology.elements}, 0.0)
    _, _, outcome = screened(topology, fed, limits)
    # With a source of 100 kohm the resistance at the plus input takes more away than the other adds.
    assert float(outcome.error_worst[0, 0]) == pytest.approx(1.0 / (1.0 + 1e5 * 1e-8) - 1.0, rel=1e-12)


def test_terms_are_named_once() -> None:
    form = derive(LIBRARY["inverting"], DEPARTURES)
    assert len(form.terms) > len(set(form.terms))
    assert term_names(form)[-len(form.accounts()) :] == (
        "open_loop_gain",
        "common_mode_rejection",
        "input_resistance",
        "output_resistance",
        "common_mode_resistance",
        "input_resistance+output_resistance",
        "output_resistance+common_mode_resistance",
    )
    assert figure_names(derive(LIBRARY["inverting"], DEPARTURES)) == (
        *("a_ol", "r_id", "r_o"),
        *("r_icm.at_plus", "r_icm.at_minus", "cmrr"),
    )


def test_what_no_column_speaks_of_is_not_in_the_form() -> None:
    nothing_rises = [False] * 3
    assert derived_with([True, False, False, False, False, *nothing_rises]) == BASIC
    assert derived_with([True, True, True, False, True, *nothing_rises]) == (*BASIC, DEPARTURES[4])
    rises = [True, True, True, False, False, True, False, True]
    assert derived_with(rises) == BASIC
    assert derived_with(rises, at_frequency=True) == (*BASIC, DEPARTURES[3])
    form = derive(LIBRARY["difference"], derived_with([True, True, True, False, True, *nothing_rises]))
    assert {symbol for _, symbol in form.departures} == {"a", "g_id", "r_o", "c_pos", "c_neg"}


@pytest.mark.oracle
def test_views_take_the_cmrr_as_one_number_of_either_sign() -> None:
    """Of a follower with c between -L and L and nothing else, u is L/sqrt(3), and so it is of the samples."""
    topology, limit = LIBRARY["follower"], 1e-4
    form = form_of(topology, DEPARTURES)
    ohms = {"r_source": 0.0, "r_f": 0.0, "r_load": np.inf}
    limits = np.array([[0.0], [0.0], [0.0], [0.0], [limit]])
    box = box_of(topology, {element.name: ohms.get(element.name, 0.0) for element in topology.elements}, 0.0)
    lot = Lot(
        form,
        StageBox(box.values, box.own, box.common, box.network, box.limits, np.ones(1)),
        np.array(["s"]),
        np.array(["p"]),
        limits,
    )
    mean, u = rss.estimates(form, lot.box, limits)
    assert mean[0, 0] == 0.0
    assert u[0, 0] == pytest.approx(limit / np.sqrt(3.0), rel=1e-12)
    errors = monte_carlo.errors_of_first(lot, 20_000)
    assert errors.std() == pytest.approx(limit / np.sqrt(3.0), rel=0.02)
    assert np.abs(errors.mean()) < 0.02 * limit
    assert 0.99 * limit < np.abs(errors).max() <= limit * (1.0 + limit)
    (entry,) = rss.budget(form, lot.box, limits)
    assert (entry.name, entry.half_width) == ("cmrr", 1.0)


@pytest.mark.oracle
@pytest.mark.parametrize("name", ["non_inverting", "difference", "inverting_t", "cascade_inverting"])
def test_a_need_put_back_just_passes(name: str) -> None:
    topology, rng = LIBRARY[name], random.Random(name)
    form, limits = form_of(topology, DEPARTURES), limits_of(rng)
    ohms = oracle.random_ohms(topology, rng, 1e3, 1e5)
    box = box_of(topology, ohms, 1e-3, limit=0.5)
    found = needed(Asked(form, box, limits[:, :, None], limits))[:, 0, 0]
    for kind, departure in enumerate(DEPARTURES):
        worst = limits.copy()
        worst[kind] = 1.0 / found[kind] if departure.reciprocal else found[kind]
        error = abs(float(paired_errors(form, box, worst)[0]))
        assert error <= 0.5
        assert found[kind] == departure.poorest or error == pytest.approx(0.5, rel=1e-9)


@pytest.mark.oracle
@pytest.mark.parametrize("name", ["non_inverting", "difference", "inverting", "instrumentation_2"])
@pytest.mark.parametrize("change", [0.1, np.inf])
def test_nothing_drawn_exceeds_the_worst_case_of_a_calibrated_stage(name: str, change: float) -> None:
    topology, rng = LIBRARY[name], random.Random(f"{name} {change}")
    form, limits = derive(topology, derived_with([True] * 8, calibrated=True)), limits_of(rng)
    assert not form.has(DEPARTURES[4])
    limits[4] = 0.0
    box = box_of(topology, oracle.random_ohms(topology, rng, 1e3, 1e5), 0.0)
    changes = np.full(limits.shape, change)
    stages = calibrated.stage_side(form, box, reach(form, limits))
    parts = calibrated.part_side(form, limits, limits, changes, np.zeros(limits.shape, np.uint8))
    outcome = calibrated.screen(form, stages, parts)
    worst = float(outcome.error_worst[0, 0])
    terms = [float(term[0, 0]) for term in calibrated.account(form, stages, parts, ALL, ALL, outcome)]
    assert sum(terms) == pytest.approx(worst, rel=1e-9)
    count, numbers = len(topology.elements), np.random.default_rng(2)
    before = numbers.choice([-1.0, 1.0, 0.0], (POINTS, FIGURES * len(topology.amplifiers)))
    after = numbers.choice([-1.0, 1.0], before.shape)
    is_cmrr = np.arange(before.shape[1]) % FIGURES == FIGURES - 1
    if np.isfinite(change):
        # Shares of the limits: reciprocals of figures between 1 - change and 1 + change times what they were.
        was = np.where(is_cmrr, before, (before + 1.0) / 2.0)
        factor = np.where(after > 0.0, 1.0 / (1.0 - change), 1.0 / (1.0 + change))
        factor = np.where(np.arange(before.shape[1]) % FIGURES == 2, np.where(after > 0.0, 1.1, 0.9), factor)
        share = np.clip(was * factor, -1.0, 1.0)
        after = np.where(is_cmrr, share, 2.0 * share - 1.0)
    elements = np.ones((POINTS, count))
    gains = [1.0 + errors_at(topology, box, limits, np.hstack([elements, of])) for of in (before, after)]
    errors = gains[1] / gains[0] - 1.0
    assert np.abs(errors).max() <= abs(worst) * (1.0 + 1e-9) + 1e-11
    assert np.abs(errors).max() >= 0.5 * abs(worst)
