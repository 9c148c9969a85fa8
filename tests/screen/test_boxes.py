"""Boxes with temperature, drift and networks that track, against brute force over what the columns say."""

from __future__ import annotations

import random

import numpy as np
import pytest
from numpy.typing import NDArray

import oracle
from gainassay.contracts.moves import MOVES
from gainassay.forms import soundness
from gainassay.forms.form import derive
from gainassay.forms.library import library
from gainassay.forms.topology import Topology
from gainassay.screen import boxes
from gainassay.screen.boxes import StageBox
from gainassay.screen.corners import active_sets, part_side, stage_side, term_names
from gainassay.screen.kernel import account, screen
from gainassay.screen.signs import reach

LIBRARY = library()
INSIDE = 20_000
ALL = slice(0, 1)

Array = NDArray[np.float64]


def box_of(ohms: Array, spreads: Array, network: NDArray[np.int8], ratios: Array, target: float) -> StageBox:
    """The box of one stage; shapes without the axis of stages."""
    return boxes.box(
        ohms[:, None], spreads[:, :, None], np.ones(1), np.array([target]), network[:, None], ratios[:, :, None]
    )


def inside(rng: np.random.Generator, spreads: Array, network: NDArray[np.int8], ratios: Array) -> Array:
    """Random factors on the elements that keep all tolerances, ratios among them; shape (elements, points).

    Drawn from what the columns say alone: logarithms within their own bounds, those of one network in a window as
    wide as the ratio allows, at its ends as often as not.
    """
    factors = np.ones((spreads.shape[1], INSIDE))
    for move in range(len(MOVES)):
        low, high = np.log(1.0 - spreads[move]), np.log(1.0 + spreads[move])
        share = np.where(rng.random(factors.shape) < 0.7, rng.random(factors.shape) < 0.5, rng.random(factors.shape))
        logs = low[:, None] + (high - low)[:, None] * share
        for place, ratio in enumerate(ratios[move]):
            members = network == place
            if members.sum() < 2 or np.isnan(ratio):
                continue
            width = np.log(1.0 + ratio)
            bottom, top = low[members].max(), high[members].min()
            start = bottom + (max(top - width, bottom) - bottom) * np.where(
                rng.random(INSIDE) < 0.7, rng.random(INSIDE) < 0.5, rng.random(INSIDE)
            )
            logs[members] = start + np.minimum(width, top - start) * share[members]
        factors *= np.exp(logs)
    return factors


def draw(topology: Topology, rng: random.Random) -> tuple[Array, Array, NDArray[np.int8], Array, oracle.Part, float]:
    form = derive(topology)
    depends = any(soundness.sign(form.loadings[place]) == 0 for place in form.loops())
    ohms = oracle.random_ohms(topology, rng, *((1e4, 1.0001e4) if depends else (1e2, 1e6)))
    values = np.array([ohms[name] for name in form.elements])
    present = np.isfinite(values) & (values > 0)
    scale = 1e-4 if depends else 1.0
    networks = rng.choice([1, 2])
    network = np.array([rng.randrange(-1, networks) if there else -1 for there in present], np.int8)
    spreads = np.array([[rng.choice([0.0, 1e-3, 1e-2, 0.1]) for _ in values] for _ in MOVES]) * scale
    ratios = np.full((len(MOVES), networks), np.nan)
    for move in range(2):
        for place in range(networks):
            spreads[move, network == place] = rng.choice([1e-2, 0.05]) * scale
            ratios[move, place] = rng.choice([0.0, 1e-4, 1e-3, 0.5, np.nan]) * scale
    spreads[:, ~present] = 0.0
    part = oracle.Part(10.0 ** rng.uniform(2.5, 6), 10.0 ** rng.uniform(4, 8), 10.0 ** rng.uniform(0, 3))
    return values, spreads, network, ratios, part, float(oracle.gain(topology, ohms, oracle.IDEAL))


@pytest.mark.oracle
@pytest.mark.parametrize("topology", LIBRARY.values(), ids=LIBRARY)
@pytest.mark.parametrize("seed", range(4))
def test_nothing_inside_exceeds_the_worst_case_and_a_corner_reaches_it(topology: Topology, seed: int) -> None:
    rng = random.Random(f"{topology.name} {seed} box")
    form = derive(topology)
    values, spreads, network, ratios, part, ideal = draw(topology, rng)
    if ideal == 0.0:
        pytest.skip("no ideal gain at 0 Hz")
    limits = np.array([[1.0 / part.a_ol], [1.0 / part.r_id], [part.r_o]])
    box = box_of(values, spreads, network, ratios, ideal)
    side = stage_side(form, box, reach(form, limits, box.memberships()))
    parts = part_side(form, limits, limits, np.zeros((3, 1), np.uint8))
    outcome = screen(side, parts, active_sets(form))
    found = float(outcome.error_worst[0, 0])

    generator = np.random.default_rng(seed)
    factors = inside(generator, spreads, network, ratios)
    ohms = {name: value * factor for name, value, factor in zip(form.elements, values, factors, strict=True)}
    shares = np.where(generator.random((3 * len(topology.amplifiers), INSIDE)) < 0.7, 1.0, 0.0)
    with np.errstate(divide="ignore"):
        departures = [
            (part.a_ol / a, part.r_id / g_id, part.r_o * r_o) for a, g_id, r_o in shares.reshape(-1, 3, INSIDE)
        ]
    errors = oracle.gains(topology, ohms, departures) / ideal - 1.0
    assert np.abs(errors).max() <= abs(found) * (1.0 + 1e-9) + 1e-11

    at = int(outcome.corner[0, 0]) // len(active_sets(form))
    corner = {name: float(ohm) for name, ohm in zip(form.elements, side.corner_values[:, at], strict=True)}
    assert float(oracle.gain(topology, corner, oracle.IDEAL) / ideal - 1) == pytest.approx(
        float(side.corner_error[at]), rel=1e-9, abs=1e-13
    )
    if not side.untied[0]:
        present = np.isfinite(values) & (values > 0)
        logs = np.log(side.corner_values[present, at] / values[present])
        assert is_kept(logs, spreads[:, present], network[present], ratios)
    terms = np.array([float(term[0, 0]) for term in account(side, parts, active_sets(form), ALL, ALL, outcome)])
    # Shares of elements are differences of gains, each rounded to some 1e-16.
    assert terms.sum() == pytest.approx(found, abs=1e-12 * np.abs(terms).sum() + 1e-15)


def is_kept(logs: Array, spreads: Array, network: NDArray[np.int8], ratios: Array) -> bool:
    """Whether elements keep within the sum of their moves and, in a network, within the sum of its ratios."""
    highest, lowest = np.log1p(spreads).sum(axis=0), np.log1p(-spreads).sum(axis=0)
    kept = bool((logs <= highest + 1e-12).all() and (logs >= lowest - 1e-12).all())
    for place in range(ratios.shape[1]):
        members = np.flatnonzero(network == place)
        if len(members) > 1 and not np.isnan(ratios[:2, place]).any():
            apart = np.log1p(ratios[:2, place]).sum() - 2 * np.log1p(-spreads[2, members]).min()
            kept &= bool(np.ptp(logs[members]) <= apart + 1e-9)
    return kept


def test_a_divider_of_one_network_feels_its_ratio_alone() -> None:
    """1 % resistors whose ratio holds to 0.1 %: with an ideal part the gain -r2/r1 is off by 0.1 %, not by 2 %."""
    topology = LIBRARY["inverting"]
    form = derive(topology)
    names = list(form.elements)
    values = np.array([{"r1": 1e3, "r2": 1e4, "r_load": np.inf, "r_source": 0.0}[name] for name in names])
    network = np.array([0 if name in ("r1", "r2") else -1 for name in names], np.int8)
    spreads = np.where([name in ("r1", "r2") for name in names], [[0.01], [0.0], [0.0]], 0.0)
    limits = np.array([[1e-5], [1e-6], [100.0]])
    for ratio, wanted in ((1e-3, 1e-3), (0.0, 0.0), (np.nan, 1.01 / 0.99 - 1.0), (0.5, 1.01 / 0.99 - 1.0)):
        box = box_of(values, spreads, network, np.array([[ratio], [np.nan], [np.nan]]), np.nan)
        side = stage_side(form, box, reach(form, limits, box.memberships()))
        assert not side.untied[0]
        assert np.abs(side.corner_error).max() == pytest.approx(wanted, rel=1e-12, abs=1e-15)
        named = dict(zip(term_names(form)[1:], side.corner_terms, strict=False))
        assert np.abs(named["tracking"]).max() < 1e-15


def test_one_member_alone_does_not_track() -> None:
    """The other half of the network sits in another stage: here its absolute tolerance counts."""
    values, spreads = np.array([1e3, 1e4]), np.array([[0.01, 0.0], [0.0, 0.0], [0.0, 0.0]])
    box = box_of(values, spreads, np.array([0, -1], np.int8), np.array([[1e-4], [np.nan], [np.nan]]), np.nan)
    assert box.ends()[0].ravel().tolist() == [0.99, 1.0]
    assert not box.memberships()


def test_moves_of_one_element_multiply() -> None:
    spreads = np.array([[[0.01]], [[0.002]], [[0.05]]])
    box = boxes.box(np.array([[1e3]]), spreads, np.ones(1), np.full(1, np.nan))
    low, high = box.ends()
    assert low[0, 0] == pytest.approx(0.99 * 0.998 * 0.95, rel=1e-15)
    assert high[0, 0] == pytest.approx(1.01 * 1.002 * 1.05, rel=1e-15)
