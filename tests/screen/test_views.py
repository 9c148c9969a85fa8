"""Root-sum-square and Monte Carlo: against a reference library, published numbers, closed forms and each other."""

from __future__ import annotations

import math
import random
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray
from uncertainties import ufloat

import oracle
from gainassay.contracts.moves import MOVES, TOLERANCE
from gainassay.forms.form import Form, derive
from gainassay.forms.library import library
from gainassay.forms.topology import GROUND, Topology
from gainassay.screen import boxes, monte_carlo, rss
from gainassay.screen.boxes import StageBox
from gainassay.screen.corners import active_sets, part_side, stage_side
from gainassay.screen.kernel import screen
from gainassay.screen.monte_carlo import Lot
from gainassay.screen.signs import reach
from gainassay.screen.views import Views, share_uncertainty, views

LIBRARY = library()
FORMS = {name: derive(topology) for name, topology in LIBRARY.items()}
SAMPLES = 2_000
EVERY = np.zeros(1, np.intp)

Array = NDArray[np.float64]


def lot_of(form: Form, box: StageBox, limits: Array) -> Lot:
    """A lot whose errors refer to the ideal gains, as the screen makes it."""
    box = box.at_dc(form.kinds)
    stages, parts = len(box.limits), limits.shape[1]
    names = [np.array([f"{kind}-{i}" for i in range(count)]) for kind, count in (("stage", stages), ("part", parts))]
    return Lot(form, replace(box, targets=stage_side(form, box).reference), names[0], names[1], limits)


def worst_of(lot: Lot) -> Array:
    """The worst case of all pairs, by the screen."""
    side = stage_side(lot.form, lot.box, reach(lot.form, lot.limits, lot.box.memberships()))
    parts = part_side(lot.form, lot.limits, lot.limits, np.zeros(lot.limits.shape, np.uint8))
    return screen(side, parts, active_sets(lot.form)).error_worst


def box_with(form: Form, values: dict[str, float], tolerances: dict[str, float], limit: float) -> StageBox:
    """One stage with tolerances; what is not named is open, a source resistance short."""
    blank = {name: 0.0 if name.startswith("r_source") else math.inf for name in form.elements}
    return boxes.with_tolerances(
        np.array([[{**blank, **values}[name]] for name in form.elements]),
        np.array([[tolerances.get(name, 0.0)] for name in form.elements]),
        np.array([limit]),
        np.array([np.nan]),
    )


def drawn(topology: Topology, rng: random.Random, spread: float, limits: Array) -> Lot | None:
    """A stage with all three moves and up to one network, and a part; none where there is no ideal gain at 0 Hz."""
    form = FORMS[topology.name]
    ohms = oracle.random_ohms(topology, rng, 1e3, 1e5)
    if oracle.gain(topology, ohms, oracle.IDEAL) == 0:
        return None
    values = np.array([ohms[name] for name in form.elements])
    present = np.isfinite(values) & (values > 0)
    spreads = np.array([[rng.choice([0.0, 0.3, 1.0]) * spread if p else 0.0 for p in present] for _ in MOVES])
    network = np.array([rng.choice([0, -1]) if p else -1 for p in present], np.int8)
    spreads[TOLERANCE, network == 0] = spread
    ratios = np.array([[spread / 10.0], [np.nan], [np.nan]])
    nothing = np.array([np.nan])
    box = boxes.box(
        values[:, None], spreads[:, :, None], np.array([spread]), nothing, network[:, None], ratios[:, :, None]
    )
    return lot_of(form, box, limits)


def gain_by_library(topology: Topology, ohms: dict[str, Any], parts: list[tuple[Any, Any, Any]]) -> Any:
    """The gain from nodal equations, solved by elimination in whatever kind of number comes in.

    Parameters
    ----------
    parts : list
        1/A_OL, 1/r_id and r_o of each amplifier.
    """
    alias: dict[str, str] = {}

    def node(name: str) -> str:
        while name in alias:
            name = alias[name]
        return name

    def size(number: Any) -> float:
        return abs(float(getattr(number, "nominal_value", number)))

    for element in topology.elements:
        if size(ohms[element.name]) == 0.0:
            first, second = (node(name) for name in element.between)
            is_fixed = first in (GROUND, *topology.input)
            alias[second if is_fixed else first] = first if is_fixed else second
    held = topology.gain in ("voltage", "transconductance")
    balanced = len(topology.input) == 2
    drive = dict(zip(topology.input, ((0.5, -0.5) if held else (1.0, -1.0)) if balanced else (1.0,), strict=True))
    known = {GROUND: 0.0} | (drive if held else {})
    unknown = [name for name in dict.fromkeys(node(name) for name in topology.nodes()) if name not in known]
    place = {name: index for index, name in enumerate(unknown)}
    order = len(unknown) + len(topology.amplifiers)
    rows: list[list[Any]] = [[0.0] * (order + 1) for _ in range(order)]

    def voltage(row: int, name: str, factor: Any) -> None:
        if name in place:
            rows[row][place[name]] += factor
        else:
            rows[row][order] -= factor * known[name]

    branches = [(*e.between, 1.0 / ohms[e.name]) for e in topology.elements if 0.0 < size(ohms[e.name]) < math.inf]
    branches += [(u.plus, u.minus, part[1]) for u, part in zip(topology.amplifiers, parts, strict=True)]
    for first, second, siemens in branches:
        for here, there in ((node(first), node(second)), (node(second), node(first))):
            if here in place:
                voltage(place[here], here, siemens)
                voltage(place[here], there, -siemens)
    for index, (u, (a, _, r_o)) in enumerate(zip(topology.amplifiers, parts, strict=True)):
        row = len(unknown) + index
        rows[place[node(u.out)]][row] -= 1.0
        for name, factor in ((u.plus, 1.0), (u.minus, -1.0), (u.out, -a)):
            voltage(row, node(name), factor)
        rows[row][row] -= a * r_o
    if not held:
        for name, value in drive.items():
            rows[place[node(name)]][order] += value
    for column in range(order):
        pivot = max(range(column, order), key=lambda row: size(rows[row][column]))
        rows[column], rows[pivot] = rows[pivot], rows[column]
        for row in range(order):
            if row != column and size(rows[row][column]):
                factor = rows[row][column] / rows[column][column]
                rows[row] = [x - factor * y for x, y in zip(rows[row], rows[column], strict=True)]
    solved = {name: rows[i][order] / rows[i][i] for name, i in place.items()} | known
    if topology.gain in ("transconductance", "current"):
        first, second = (node(name) for name in topology.element(topology.output).between)
        return (solved[first] - solved[second]) / ohms[topology.output]
    return solved[node(topology.output)]


@pytest.mark.oracle
@pytest.mark.parametrize("topology", LIBRARY.values(), ids=LIBRARY)
@pytest.mark.parametrize("seed", range(2))
def test_sensitivities_are_those_of_a_reference_library(topology: Topology, seed: int) -> None:
    """`uncertainties` differentiates every operation of a nodal solve that shares no formula with the package."""
    rng = random.Random(f"{topology.name} {seed} sensitivities")
    limits = np.array([[10.0 ** -rng.uniform(1, 3)], [10.0 ** -rng.uniform(4, 6)], [10.0 ** rng.uniform(1, 3)]])
    lot = drawn(topology, rng, 0.01, limits)
    if lot is None:
        pytest.skip("no ideal gain at 0 Hz")
    form, stages = lot.form, rss.middle(lot.form, lot.box)
    own, shared = ((ends.low + ends.high) / 2.0 for ends in (lot.box.own, lot.box.common))
    at = (lot.box.values * boxes.product(own) * boxes.product(boxes.of_members(lot.box.network, shared)))[:, 0]
    ohms = {name: ufloat(x, 1.0) if 0.0 < x < math.inf else x for name, x in zip(form.elements, at, strict=True)}
    figures = [[ufloat(limit / 2.0, 1.0) for limit in limits[:, 0]] for _ in topology.amplifiers]
    gain = gain_by_library(topology, ohms, [(a, g_id, r_o) for a, g_id, r_o in figures]) / float(lot.box.targets[0])

    def slope(variable: Any) -> float:
        return 0.0 if isinstance(variable, float) else gain.derivatives.get(variable, 0.0) * variable.nominal_value

    alone = [slope(ohms[name]) for name in form.elements]
    together = sum(s for s, place in zip(alone, lot.box.network[:, 0], strict=True) if place == 0)
    common = [together] * lot.box.common.low.shape[1]
    wanted = [*alone, *common, *(slope(x) for part in figures for x in part)]
    error, *found = rss.error_and_sensitivities(form, stages, rss.in_the_middle(form, limits), range(len(wanted)))
    scale = 1.0 + abs(gain.nominal_value)
    assert error[0, 0] == pytest.approx(gain.nominal_value - 1.0, abs=1e-11 * scale)
    for one, other in zip(found, wanted, strict=True):
        assert one[0, 0] == pytest.approx(other, rel=1e-9, abs=1e-11 * scale)


@pytest.mark.oracle
@pytest.mark.parametrize("topology", LIBRARY.values(), ids=LIBRARY)
def test_the_worst_case_contains_both(topology: Topology) -> None:
    rng = random.Random(f"{topology.name} contained")
    limits = np.array([10.0 ** -np.arange(3.0, 6.0), [1e-6, 1e-5, 0.0], [100.0, 0.0, 1e3]])
    lot = drawn(topology, rng, 0.02, limits)
    if lot is None:
        pytest.skip("no ideal gain at 0 Hz")
    worst = worst_of(lot)
    found = views(lot, worst, SAMPLES)
    has_bound = np.isfinite(worst)
    assert (np.isfinite(np.array(list(vars(found).values()))) == has_bound).all()
    assert (np.abs(found.error_rss) <= np.abs(worst))[has_bound].all()
    assert (np.abs(found.error_mean) <= np.abs(worst) * (1.0 + 1e-12) + 1e-15)[has_bound].all()
    stages = monte_carlo.stage_samples(lot, EVERY, SAMPLES)
    errors = monte_carlo.errors(stages, 0, monte_carlo.part_samples(lot, np.arange(3), SAMPLES))
    beyond = np.abs(errors).max(axis=1) > np.abs(worst[0]) * (1.0 + 1e-12) + 1e-15
    assert not beyond[has_bound[0]].any()


@pytest.mark.oracle
@pytest.mark.parametrize("topology", LIBRARY.values(), ids=LIBRARY)
def test_monte_carlo_meets_root_sum_square_where_tolerances_are_small(topology: Topology) -> None:
    """To first order both are the same: mean and standard deviation of N samples keep their own statistical bounds."""
    rng = random.Random(f"{topology.name} small")
    samples = 20_000
    lot = drawn(topology, rng, 1e-5, np.array([[1e-8], [1e-8], [10.0]]))
    if lot is None:
        pytest.skip("no ideal gain at 0 Hz")
    mean, uncertainty = (float(one[0, 0]) for one in rss.estimates(lot.form, lot.box, lot.limits))
    errors = monte_carlo.errors_of_first(lot, samples)
    assert abs(errors.mean() - mean) <= 4.0 * uncertainty / math.sqrt(samples)
    # The variance of a sample's variance is at most that of a normal one: rectangular distributions have short tails.
    assert abs(errors.std() / uncertainty - 1.0) <= 4.0 / math.sqrt(2.0 * samples)


def one_pair(lot: Lot, samples: int = SAMPLES) -> dict[str, float]:
    return {name: float(values[0, 0]) for name, values in vars(views(lot, worst_of(lot), samples)).items()}


@pytest.mark.oracle
@pytest.mark.parametrize(
    ("tolerances", "wanted"),
    [
        ({"r2": 0.01}, 0.5),  # rectangular: limit over tolerance
        ({"r1": 0.01, "r2": 0.01}, 1.0 - 0.75**2),  # triangular, to first order
    ],
    ids=["one resistor", "two resistors"],
)
def test_yield_of_an_inverting_stage(tolerances: dict[str, float], wanted: float) -> None:
    form = FORMS["inverting"]
    lot = lot_of(form, box_with(form, {"r1": 1e4, "r2": 1e5}, tolerances, 0.005), np.array([[1e-12], [0.0], [0.0]]))
    found = one_pair(lot, 20_000)
    assert abs(found["yield_mc"] - wanted) <= 4.0 * found["yield_mc_u"]
    assert found["yield_mc_u"] == pytest.approx(math.sqrt(wanted * (1.0 - wanted) / 20_000), rel=0.05)


@pytest.mark.oracle
def test_a_network_leaves_its_ratio_alone() -> None:
    """What both resistors do together cancels; each has half the ratio's tolerance for itself."""
    form, ratio = FORMS["inverting"], 1e-4
    names = list(form.elements)
    box = box_with(form, {"r1": 1e4, "r2": 1e5}, {}, 1e-3)
    network = np.array([[0 if name in ("r1", "r2") else -1] for name in names], np.int8)
    spreads = np.zeros((len(MOVES), len(names), 1))
    spreads[TOLERANCE] = np.where(network == 0, 0.01, 0.0)
    ratios = np.array([[[ratio]], [[np.nan]], [[np.nan]]])
    tied = boxes.box(box.values, spreads, box.limits, box.targets, network, ratios)
    mean, uncertainty = rss.estimates(form, lot_of(form, tied, np.zeros((3, 1))).box, np.zeros((3, 1)))
    assert abs(mean[0, 0]) < 1e-15
    assert uncertainty[0, 0] == pytest.approx(math.sqrt(2.0) * ratio / 2.0 / math.sqrt(3.0), rel=1e-4)


def test_views_of_a_pair_do_not_depend_on_others() -> None:
    """Neither on which other stages and parts there are, nor on how many networks there is room for."""
    form = FORMS["difference"]
    rng = np.random.default_rng(4)
    values = 10.0 ** rng.uniform(3, 5, (len(form.elements), 40))
    box = boxes.with_tolerances(values, np.full(values.shape, 0.01), np.full(40, 0.02), np.full(40, np.nan))
    limits = 10.0 ** np.array([rng.uniform(-5, -2, 30), rng.uniform(-8, -5, 30), rng.uniform(0, 3, 30)])
    lot = lot_of(form, box, limits)
    whole = views(lot, worst_of(lot), 200)
    rows, columns = np.arange(3, 40, 5), np.arange(1, 30, 4)
    some = Lot(form, lot.box.part(rows), lot.stage_names[rows], lot.part_names[columns], limits[:, columns])
    room = np.ones((len(MOVES), 2, len(rows)))
    some = replace(some, box=replace(some.box, common=boxes.Range(room, room)))
    part = views(some, worst_of(lot)[np.ix_(rows, columns)], 200)
    assert 0.0 < whole.yield_mc.min() < whole.yield_mc.max()
    for name, found in vars(part).items():
        assert found.tobytes() == np.ascontiguousarray(vars(whole)[name][np.ix_(rows, columns)]).tobytes(), name


@pytest.mark.parametrize("numbers", [1, 3_000, 100_000])
def test_views_do_not_depend_on_blocks(monkeypatch: pytest.MonkeyPatch, numbers: int) -> None:
    form = FORMS["inverting"]
    rng = np.random.default_rng(5)
    values = 10.0 ** rng.uniform(3, 5, (len(form.elements), 20))
    box = boxes.with_tolerances(values, np.full(values.shape, 0.01), np.full(20, 0.02), np.full(20, np.nan))
    lot = lot_of(form, box, 10.0 ** np.array([rng.uniform(-5, -2, 9), rng.uniform(-8, -5, 9), rng.uniform(0, 3, 9)]))
    worst = worst_of(lot)

    def bits() -> list[bytes]:
        found: Views = views(lot, worst, 100)
        return [values.tobytes() for values in vars(found).values()]

    usual = bits()
    monkeypatch.setattr(monte_carlo, "NUMBERS_PER_STRIP", numbers)
    monkeypatch.setattr(monte_carlo, "SAMPLES_PER_BLOCK", numbers)
    monkeypatch.setattr(rss, "SLOPES_AT_A_TIME", numbers)
    assert bits() == usual
    for one, other in zip(*(rss.estimates(form, lot.box, lot.limits, block) for block in (7, numbers)), strict=True):
        assert one.tobytes() == other.tobytes()


@pytest.mark.frozen
def test_samples_stay_the_same() -> None:
    """A later run, with whatever release of the random numbers' library, must give the same yields."""
    wanted = [0.4152891123223109, 0.6456762058306879, 0.5486349361332187]
    assert monte_carlo.uniform("stage", "level-01", (3,)).tolist() == wanted


def test_a_share_of_all_or_none_is_not_certain() -> None:
    none, half, whole = share_uncertainty(np.array([0, 500, 1000]), 1000)
    assert none == whole == pytest.approx(1e-3, rel=5e-3)
    assert half == pytest.approx(math.sqrt(0.25 / 1000), rel=2e-3)


@pytest.mark.source
@pytest.mark.parametrize(
    ("contributions", "printed"),
    [
        # U01: JCGM 100:2008, H.1.6, end gauge [nm]; inputs read in a text, output from memory.
        ((25.0, 9.7, 2.9, 16.6), "32"),
        # U02: JCGM 100:2008, G.4.2 [%]; from memory.
        ((0.25, 0.57, 0.82), "1.03"),
    ],
    ids=["U01", "U02"],
)
def test_combined_uncertainty_as_published(contributions: tuple[float, ...], printed: str) -> None:
    digits = len(printed.partition(".")[2])
    found = float(rss.root_sum_square(np.array([value]) for value in contributions)[0])
    assert f"{found:.{digits}f}" == printed


@pytest.mark.source
@pytest.mark.parametrize(
    ("topology", "values", "u", "sensitivity", "worst"),
    [
        ("inverting", {"r1": 1e4, "r2": 1e4}, 0.00816497, 1.0, 0.020202),
        ("non_inverting", {"r1": 1e3, "r2": 9e3}, 0.00734847, 0.9, 0.018181818),
    ],
)
def test_two_resistors_of_1_percent(
    topology: str, values: dict[str, float], u: float, sensitivity: float, worst: float
) -> None:
    """U04: JCGM 100:2008, 4.3.7 (half width over the root of 3; from memory); the numbers are derived, not printed."""
    form = FORMS[topology]
    lot = lot_of(form, box_with(form, values, {"r1": 0.01, "r2": 0.01}, 0.1), np.zeros((3, 1)))
    found = one_pair(lot)
    assert found["error_u"] == pytest.approx(u, rel=1e-6)
    assert abs(found["error_rss"]) == pytest.approx(2.0 * u, rel=1e-6)
    assert float(worst_of(lot)[0, 0]) == pytest.approx(worst, rel=1e-5)
    entries = {entry.name: entry for entry in rss.budget(form, lot.box, lot.limits)}
    assert entries["r1.tolerance"].sensitivity == pytest.approx(-sensitivity, rel=1e-12)
    assert entries["r2.tolerance"].sensitivity == pytest.approx(sensitivity, rel=1e-12)


@pytest.mark.source
def test_probability_of_conformance_as_published() -> None:
    """D02: JCGM 106:2012, one-sided example, -5.47 V with u = 0.05 V, limit -5.40 V; from memory."""
    assert f"{rss.probability_inside(-5.47, 0.05, -math.inf, -5.40):.2f}" == "0.92"


@pytest.mark.source
@pytest.mark.parametrize(
    ("probability", "printed"), [(0.8, "0.84"), (0.9, "1.28"), (0.95, "1.64"), (0.99, "2.33"), (0.999, "3.09")]
)
def test_table_of_conformance_as_published(probability: float, printed: str) -> None:
    """D03: JCGM 106:2012, table 1, z to two decimals; from memory."""
    z = float(printed)
    low, high = (rss.probability_inside(0.0, 1.0, -math.inf, end) for end in (z - 0.005, z + 0.005))
    assert low <= probability <= high


@pytest.mark.source
@pytest.mark.parametrize(
    ("times", "below", "exact"),
    [
        (0.0, 0.5, 0.5),  # "< 50 %", read in a text
        (1.0, 0.025, 0.022750132),  # "< 2.5 %", read in a text
        (0.83, 0.05, 0.048457226),  # "< 5 %", from memory
        (1.5, 0.0016, 0.001349898),  # "< 0.16 %", from memory
        (3.0, 1e-6, 9.8658765e-10),  # "< 1 ppm", from memory
    ],
)
def test_false_acceptance_with_a_guard_band_as_published(times: float, below: float, exact: float) -> None:
    """D04: ILAC-G8:09/2019 and ISO 14253-1, a guard band of `times` U = 2 u, an error just accepted."""
    limit, u = 1e-3, 1e-4
    accepted = limit - times * 2.0 * u
    false = 1.0 - rss.probability_inside(accepted, u, -math.inf, limit)
    assert false <= below
    assert false == pytest.approx(exact, rel=1e-6)


@pytest.mark.oracle
def test_risks_of_a_production() -> None:
    """D05: 1500 +/- 0.2, u0 = 0.12, um = 0.04, no guard band (JCGM 106's setting as remembered, numbers computed)."""
    limit, of_production, of_measurement = 0.2, 0.12, 0.04
    assert rss.probability_inside(0.0, of_production, -limit, limit) == pytest.approx(0.9044193, abs=1e-7)
    edges = np.linspace(-1.2, 1.2, 24_001)
    true = (edges[1:] + edges[:-1]) / 2.0
    density = np.exp(-((true / of_production) ** 2) / 2.0) / (of_production * math.sqrt(2.0 * math.pi)) * 1e-4
    accepted = np.array([rss.probability_inside(value, of_measurement, -limit, limit) for value in true])
    good = np.abs(true) <= limit
    assert (density * accepted)[~good].sum() == pytest.approx(0.018942207, abs=1e-7)
    assert (density * (1.0 - accepted))[good].sum() == pytest.approx(0.0372078, abs=1e-7)
