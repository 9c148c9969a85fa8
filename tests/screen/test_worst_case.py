"""The worst case against brute force over an independent nodal solve: every corner, and points inside the box."""

from __future__ import annotations

import random

import numpy as np
import pytest
from numpy.typing import NDArray

import oracle
from gainassay.forms import soundness
from gainassay.forms.form import derive
from gainassay.forms.library import library
from gainassay.forms.topology import Topology
from gainassay.screen.boxes import StageBox, with_tolerances
from gainassay.screen.corners import active_sets, part_side, stage_side, term_names
from gainassay.screen.kernel import UNBOUNDED, Outcome, account, screen
from gainassay.screen.signs import reach

LIBRARY = library()
INSIDE = 2_000
ALL = slice(0, 1)


def worst_case(
    topology: Topology, ohms: dict[str, float], tolerance: float, part: oracle.Part, target: float
) -> tuple[float, float]:
    """The error of largest magnitude over all corners, and the largest found inside, by nodal solves alone."""
    names = [name for name in ohms if np.isfinite(ohms[name]) and ohms[name] > 0]
    count = 3 * len(topology.amplifiers)
    ends, limits = np.array([-1.0, 1.0]), np.array([0.0, 1.0])
    at_corners = np.stack(np.meshgrid(*[ends] * len(names), *[limits] * count), axis=-1).reshape(-1, len(names) + count)
    rng = np.random.default_rng(11)
    inside = np.hstack([rng.uniform(-1, 1, (INSIDE, len(names))), rng.uniform(0, 1, (INSIDE, count))])
    points = np.vstack([at_corners, inside])
    values = {
        name: ohms[name] * (1.0 + tolerance * points[:, names.index(name)])
        if name in names
        else np.full(len(points), ohms[name])
        for name in ohms
    }
    with np.errstate(divide="ignore"):
        parts = [
            (part.a_ol / slope, part.r_id / g_id, part.r_o * r_o)
            for slope, g_id, r_o in points[:, len(names) :].T.reshape(-1, 3, len(points))
        ]
    errors = oracle.gains(topology, values, parts) / target - 1.0
    corner_errors, inside_errors = errors[: len(at_corners)], errors[len(at_corners) :]
    return float(corner_errors[np.abs(corner_errors).argmax()]), float(np.abs(inside_errors).max())


def screened(
    topology: Topology, ohms: dict[str, float], tolerance: float, part: oracle.Part, target: float
) -> tuple[Outcome, NDArray[np.float64]]:
    form = derive(topology)
    values = np.array([[ohms[name]] for name in form.elements])
    present = np.isfinite(values) & (values > 0)
    box = with_tolerances(values, np.where(present, tolerance, 0.0), np.ones(1), np.array([target]))
    limits = np.array([[1.0 / part.a_ol], [1.0 / part.r_id], [part.r_o]])
    stages = stage_side(form, box, reach(form, limits))
    parts = part_side(form, limits, limits, np.zeros((3, 1), np.uint8))
    outcome = screen(stages, parts, active_sets(form))
    terms = account(stages, parts, active_sets(form), ALL, ALL, outcome)
    return outcome, np.array([float(term[0, 0]) for term in terms])


@pytest.mark.oracle
@pytest.mark.parametrize("topology", LIBRARY.values(), ids=LIBRARY)
@pytest.mark.parametrize("seed", range(3))
def test_equals_brute_force_and_nothing_inside_exceeds_it(topology: Topology, seed: int) -> None:
    rng = random.Random(f"{topology.name} {seed}")
    form = derive(topology)
    depends = any(soundness.sign(form.loadings[place]) == 0 for place in form.loops())
    # Where the sign of the feedback depends on the values, equal ones keep it negative or nearly balanced.
    ohms = oracle.random_ohms(topology, rng, *((1e4, 1.0001e4) if depends else (1e2, 1e6)))
    part = oracle.Part(10.0 ** rng.uniform(2, 5), 10.0 ** rng.uniform(4, 8), 10.0 ** rng.uniform(0, 3))
    ideal = float(oracle.gain(topology, ohms, oracle.IDEAL))
    if ideal == 0.0:
        pytest.skip("no ideal gain at 0 Hz")
    target = ideal * rng.choice([1.0, 1.003, 0.98])
    tolerance = rng.choice([1e-3, 1e-2, 0.2]) if not depends else 1e-5
    outcome, terms = screened(topology, ohms, tolerance, part, target)
    worst, inside = worst_case(topology, ohms, tolerance, part, target)
    found = float(outcome.error_worst[0, 0])
    # The double precision solve is good to some 1e-12 of the gain.
    assert found == pytest.approx(worst, rel=1e-9, abs=1e-11)
    assert inside <= abs(found) + 1e-11
    assert terms.sum() == pytest.approx(found, abs=1e-12 * np.abs(terms).sum())
    largest = int(np.abs(terms).argmax())
    assert int(outcome.dominant[0, 0]) == largest
    assert float(outcome.dominant_value[0, 0]) == terms[largest]


def positive_feedback() -> Topology:
    """A follower whose output also drives its own + input: at low A_OL the loop turns over."""
    return oracle.network(
        {"r1": ("in", "plus"), "r2": ("plus", "out"), "r3": ("minus", "out"), "r4": ("minus", "ground")},
        [("plus", "minus", "out")],
    )


def test_a_vanishing_denominator_gives_no_number() -> None:
    ohms = {"r1": 1000.0, "r2": 990.0, "r3": 1000.0, "r4": 1000.0}
    outcome, _ = screened(positive_feedback(), ohms, 0.02, oracle.Part(1e6), -1.0)
    assert outcome.corner[0, 0] == UNBOUNDED
    assert np.isnan(outcome.error_worst[0, 0])
    assert np.isnan(outcome.dominant_value[0, 0])


def test_a_stable_mixture_of_feedback_still_gets_its_number() -> None:
    ohms = {"r1": 1000.0, "r2": 5000.0, "r3": 1000.0, "r4": 9000.0}
    outcome, terms = screened(positive_feedback(), ohms, 0.001, oracle.Part(1e4, 1e6, 50.0), 1.0)
    assert outcome.corner[0, 0] != UNBOUNDED
    assert terms.sum() == pytest.approx(float(outcome.error_worst[0, 0]), rel=1e-12)


def several(seed: int, stages: int, parts: int) -> tuple[StageBox, NDArray[np.float64]]:
    rng = np.random.default_rng(seed)
    form = derive(LIBRARY["inverting_t"])
    values = 10.0 ** rng.uniform(3, 5, (len(form.elements), stages))
    values[form.elements.index("r_source"), ::2] = 0.0
    values[form.elements.index("r_load"), ::3] = np.inf
    tolerances = np.where(np.isfinite(values) & (values > 0), rng.choice([0.0, 1e-3, 1e-2], values.shape), 0.0)
    box = with_tolerances(values, tolerances, np.full(stages, 1e-3), np.full(stages, np.nan))
    limits = np.array(
        [1e-6 * 10 ** rng.uniform(0, 3, parts), 10 ** -rng.uniform(5, 9, parts), 10 ** rng.uniform(0, 3, parts)]
    )
    return box, limits


@pytest.mark.parametrize("block", [1, 7, 64, 1000, 10**6])
def test_no_bit_depends_on_the_block(block: int) -> None:
    form = derive(LIBRARY["inverting_t"])
    box, limits = several(3, 23, 41)
    parts = part_side(form, limits / 3, limits, np.zeros(limits.shape, np.uint8))
    sets = active_sets(form)
    reached = reach(form, limits)
    whole = screen(stage_side(form, box, reached), parts, sets)
    cut = screen(stage_side(form, box, reached), parts, sets, block)
    for name in ("error_nominal", "error_worst", "corner", "dominant", "dominant_value"):
        assert getattr(whole, name).tobytes() == getattr(cut, name).tobytes(), name


def test_no_bit_depends_on_the_company() -> None:
    """A stage gives the same numbers alone as among stages with other tolerances, apart from the corner's count."""
    form = derive(LIBRARY["inverting_t"])
    box, limits = several(5, 12, 9)
    parts = part_side(form, limits / 3, limits, np.zeros(limits.shape, np.uint8))
    reached = reach(form, limits)
    together = screen(stage_side(form, box, reached), parts, active_sets(form))
    for index in range(12):
        alone = screen(stage_side(form, box.part(slice(index, index + 1)), reached), parts, active_sets(form))
        for name in ("error_nominal", "error_worst", "dominant", "dominant_value"):
            assert getattr(alone, name).tobytes() == getattr(together, name)[index : index + 1].tobytes(), name


def test_tolerances_shares_are_alike_for_elements_that_play_the_same_part() -> None:
    form = derive(LIBRARY["summing_2_in1"])
    values = np.array([[1e4], [1e4], [1e5], [np.inf]])
    box = with_tolerances(values, np.array([[0.01], [0.0], [0.01], [0.0]]), np.ones(1), np.array([np.nan]))
    side = stage_side(form, box)
    assert side.corner_terms.sum(axis=0) + side.set_point == pytest.approx(side.corner_error, abs=1e-15)
    up_down = int(side.corner_error.argmax())
    shares = dict(zip(term_names(form)[1:], side.corner_terms[:, up_down], strict=False))
    low, high = shares["r1.tolerance"], shares["r_f.tolerance"]
    # r1 down by 1 % and r_f up by 1 % weigh nearly the same: their exact ratio is 1.01/0.99 / 1.01 apart.
    assert low == pytest.approx(high, rel=0.02)
