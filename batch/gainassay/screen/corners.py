"""The two sides of a screen before they meet: stages at every corner of their tolerances, parts at their limits.

A corner of a pair is a corner of the stage (each toleranced element at its lower or upper end) together with
a corner of the part (each departure at 0 or at its limit). At a corner of the part the products m_k are either
what the limits give or 0, so its corners come down to sets of *active* products, most of them shared.

Where `signs` proves in which direction a variable moves the gain, only the end is visited at which the gain is
largest and the one at which it is smallest; of the other variables every combination of ends. What is visited
depends on the stage and on the whole parts table, never on other stages nor on how the pairs are cut.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import product

import numpy as np
from numpy.typing import NDArray

from gainassay.errors import InputError
from gainassay.forms import coefficients
from gainassay.forms.coefficients import Coefficients, FloatArray
from gainassay.forms.departures import DEPARTURES
from gainassay.forms.form import Form
from gainassay.screen.signs import FALLS, FIXED, OPEN, RISES, Reach, directions

MOST_OPEN_ELEMENTS = 14
"""Beyond this the corners of one stage, two to that power, are too many to visit."""

SET_POINT = "set_point"
TOLERANCE = "{}.tolerance"


@dataclass(frozen=True)
class StageBox:
    """Stages of one topology with their tolerances.

    Attributes
    ----------
    values, tolerances : ndarray, shape (elements, stages)
        Nominal values [ohm] and tolerances as fractions.
    limits, targets : ndarray, shape (stages,)
        Required accuracy as a fraction; target gain [gain unit] or nan.
    """

    values: FloatArray
    tolerances: FloatArray
    limits: FloatArray
    targets: FloatArray

    def part(self, stages: slice | NDArray[np.intp]) -> StageBox:
        """Some of the stages."""
        return StageBox(self.values[:, stages], self.tolerances[:, stages], self.limits[stages], self.targets[stages])


@dataclass(frozen=True)
class Plan:
    """Stages that visit the same corners.

    Attributes
    ----------
    stages : ndarray of int
        Their places.
    corners : tuple[tuple[int, int], ...]
        Each a corner of the stage, counted from the stage's first, and the place of a set in `active_sets`; none
        for stages that are not regular.
    """

    stages: NDArray[np.intp]
    corners: tuple[tuple[int, int], ...]


@dataclass(frozen=True)
class StageSide:
    """What the kernel needs of some stages of one topology.

    Attributes
    ----------
    gain_ideal, reference, limits, set_point : ndarray, shape (stages,)
        Ideal gain at the nominal values [gain unit], the gain that errors refer to [gain unit], required
        accuracy as a fraction, and (gain_ideal - reference)/reference.
    contrasts, loadings : ndarray, shape (terms, stages)
        n_k - d_k and d_k at the nominal values.
    first : ndarray of int, shape (stages,)
        Where the corners of each stage begin on the axis of corners, all stages' corners in a row.
    corner_values : ndarray, shape (elements, corners)
        The elements at each corner [ohm].
    corner_contrasts, corner_loadings : ndarray, shape (terms, corners)
        n_k - d_k and d_k at each corner.
    corner_error : ndarray, shape (corners,)
        (ideal gain at the corner - reference)/reference.
    corner_terms : ndarray, shape (elements, corners)
        Share of each element's tolerance in that; with `set_point` they sum to it.
    plans : tuple[Plan, ...]
        Which corners to visit; every stage is in one of them.
    regular : ndarray of bool, shape (stages,)
        Whether, at every corner, all is finite, the ideal gain keeps its sign and the feedback is negative.
    matters : ndarray of bool, shape (departures, stages)
        Whether a departure, of any amplifier, has a coefficient that is not zero.
    """

    gain_ideal: FloatArray
    reference: FloatArray
    limits: FloatArray
    set_point: FloatArray
    contrasts: FloatArray
    loadings: FloatArray
    first: NDArray[np.intp]
    corner_values: FloatArray
    corner_contrasts: FloatArray
    corner_loadings: FloatArray
    corner_error: FloatArray
    corner_terms: FloatArray
    plans: tuple[Plan, ...]
    regular: NDArray[np.bool_]
    matters: NDArray[np.bool_]


@dataclass(frozen=True)
class PartSide:
    """What the kernel needs of some parts for one form.

    Attributes
    ----------
    nominal, worst : ndarray, shape (terms, parts)
        The products m_k at the nominal figures, and with every departure at its limit.
    evidence : ndarray of uint8, shape (departures, parts)
        What each limit rests on.
    """

    nominal: FloatArray
    worst: FloatArray
    evidence: NDArray[np.uint8]

    def part(self, parts: slice) -> PartSide:
        """Some of the parts."""
        return PartSide(self.nominal[:, parts], self.worst[:, parts], self.evidence[:, parts])


def term_names(form: Form) -> tuple[str, ...]:
    """Names of all terms of a row's account, in the order of every account: set-point, tolerances, departures."""
    return (SET_POINT, *(TOLERANCE.format(element) for element in form.elements), *form.terms)


def active_sets(form: Form) -> tuple[tuple[int, ...], ...]:
    """The sets of products m_k that are not 0 at some corner of the departures' box, each once, smallest first.

    Every amplifier's departures are taken for themselves: two amplifiers of one part number need not share
    their errors.
    """
    sets = {_active(form, at_limit) for at_limit in product((False, True), repeat=len(form.departures))}
    return tuple(sorted(sets, key=lambda active: (len(active), active)))


def stage_side(form: Form, box: StageBox, reached: Reach | None = None) -> StageSide:
    """Evaluate a form's coefficient functions for some stages, at the nominal values and at the corners to visit.

    Parameters
    ----------
    reached : Reach, optional
        How far the departures of all parts reach: corners are then left out that provably are not the worst. If
        not given, every corner is visited.

    Raises
    ------
    InputError
        If more elements have a tolerance than can be visited corner by corner.
    """
    # At 0 Hz no tolerance of a capacitor or an inductor matters.
    is_resistor = np.array([kind == "resistor" for kind in form.kinds])
    tolerances = np.where(is_resistor[:, None], box.tolerances, 0.0)
    nominal = coefficients.evaluate(form, coefficients.at_dc(form, box.values))
    reference = np.where(np.isnan(box.targets), nominal.gain_ideal, box.targets)
    visited = _visited(form, box.values, tolerances, reached)
    stage = visited.stage
    values = box.values[:, stage] * (1.0 + np.where(visited.is_upper, 1.0, -1.0) * tolerances[:, stage])
    at_corners = coefficients.evaluate(form, coefficients.at_dc(form, values))
    terms = _tolerance_terms(form, box.values[:, stage], values, tolerances, reference[stage])
    with np.errstate(invalid="ignore"):
        corner_error = (at_corners.gain_ideal - reference[stage]) / reference[stage]
        is_regular = (
            np.isfinite(at_corners.contrasts).all(axis=0)
            & np.isfinite(at_corners.loadings).all(axis=0)
            & np.isfinite(at_corners.gain_ideal)
            & (np.sign(at_corners.gain_ideal) == np.sign(nominal.gain_ideal[stage]))
            & np.isfinite(corner_error)
            & ~coefficients.is_feedback_positive(form, at_corners)
        )
        regular = np.logical_and.reduceat(is_regular, visited.first)
        return StageSide(
            gain_ideal=nominal.gain_ideal,
            reference=reference,
            limits=box.limits,
            set_point=(nominal.gain_ideal - reference) / reference,
            contrasts=nominal.contrasts,
            loadings=nominal.loadings,
            first=visited.first,
            corner_values=values,
            corner_contrasts=at_corners.contrasts,
            corner_loadings=at_corners.loadings,
            corner_error=corner_error,
            corner_terms=terms,
            plans=_with_a_bound(visited.plans, regular),
            regular=regular,
            matters=_matters(form, box.values, tolerances, at_corners, visited.first),
        )


@dataclass(frozen=True)
class _Visited:
    """The corners that some stages visit, all stages' corners in a row.

    Attributes
    ----------
    stage : ndarray of int, shape (corners,)
    is_upper : ndarray of bool, shape (elements, corners)
        Whether an element is at the upper end of its tolerance; elements without one are not.
    first : ndarray of int, shape (stages,)
    """

    stage: NDArray[np.intp]
    is_upper: NDArray[np.bool_]
    first: NDArray[np.intp]
    plans: tuple[Plan, ...]


def _visited(form: Form, values: FloatArray, tolerances: FloatArray, reached: Reach | None) -> _Visited:
    sets = active_sets(form)
    everywhere = _everywhere(form, tolerances)
    known = everywhere
    if reached is not None:
        found = directions(reached, values, tolerances)
        known = np.where(found.proved, found.of, everywhere)
    # Two of the same pattern visit the same corners; there are few patterns.
    patterns, pattern_of = np.unique(known, axis=1, return_inverse=True)
    pattern_of = pattern_of.reshape(-1)
    recipes = [_recipe(form, sets, pattern) for pattern in patterns.T]
    counts = np.array([len(recipe.ends) for recipe in recipes], np.intp)[pattern_of]
    first = np.concatenate([[0], np.cumsum(counts)[:-1]])
    stage = np.repeat(np.arange(len(counts)), counts)
    is_upper = np.empty((len(form.elements), len(stage)), dtype=bool)
    plans: dict[tuple[tuple[int, int], ...], list[NDArray[np.intp]]] = {}
    for place, recipe in enumerate(recipes):
        members = np.flatnonzero(pattern_of == place)
        plans.setdefault(recipe.corners, []).append(members)
        for j, ends in enumerate(recipe.ends):
            is_upper[:, first[members] + j] = np.array(ends)[:, None]
    return _Visited(
        stage,
        is_upper,
        first,
        tuple(Plan(np.sort(np.concatenate(members)), corners) for corners, members in plans.items()),
    )


def _with_a_bound(plans: tuple[Plan, ...], regular: NDArray[np.bool_]) -> tuple[Plan, ...]:
    """The plans of regular stages, and one without corners for the others: no part gives these a bound."""
    kept = [Plan(plan.stages[regular[plan.stages]], plan.corners) for plan in plans]
    return tuple(plan for plan in (*kept, Plan(np.flatnonzero(~regular), ())) if len(plan.stages))


def _everywhere(form: Form, tolerances: FloatArray) -> NDArray[np.int8]:
    """Directions that leave no corner out."""
    known = np.full((len(form.elements) + len(form.departures), tolerances.shape[1]), OPEN, np.int8)
    known[: len(form.elements)][tolerances == 0.0] = FIXED
    return known


@dataclass(frozen=True)
class _Recipe:
    """The corners that follow from the directions of the variables.

    Attributes
    ----------
    ends : tuple[tuple[bool, ...], ...]
        The corners of the stage, the lower ends first: which elements are at their upper ends.
    corners : tuple[tuple[int, int], ...]
        As in `Plan`.
    """

    ends: tuple[tuple[bool, ...], ...]
    corners: tuple[tuple[int, int], ...]


def _recipe(form: Form, sets: tuple[tuple[int, ...], ...], pattern: NDArray[np.int8]) -> _Recipe:
    """For the largest and for the smallest gain, all ends of the variables of open direction."""
    count = len(form.elements)
    is_open = (pattern == OPEN).tolist()
    if sum(is_open[:count]) > MOST_OPEN_ELEMENTS:
        raise InputError(
            f"topology '{form.topology}': {sum(is_open[:count])} elements of a stage have a tolerance that may move "
            f"the gain either way; at most {MOST_OPEN_ELEMENTS} can be taken to every corner"
        )
    place = {active: q for q, active in enumerate(sets)}
    found = set()
    for extreme in (RISES, FALLS):
        choices = [
            (False, True) if unknown else (direction == extreme,)
            for direction, unknown in zip(pattern.tolist(), is_open, strict=True)
        ]
        element_ends = list(product(*choices[:count]))
        departure_sets = {place[_active(form, at_limit)] for at_limit in product(*choices[count:])}
        found |= {(ends[::-1], q) for ends in element_ends for q in departure_sets}
    # Ordered by the last element first, as the bits of a number are, then by the set of active products.
    ordered = sorted(found)
    stage_corners = sorted({ends for ends, _ in ordered})
    number = {ends: j for j, ends in enumerate(stage_corners)}
    return _Recipe(tuple(ends[::-1] for ends in stage_corners), tuple((number[ends], q) for ends, q in ordered))


def _active(form: Form, at_limit: Sequence[bool]) -> tuple[int, ...]:
    """The products m_k that are not 0 where the marked departures are at their limits and the others 0."""
    return tuple(k for k, monomial in enumerate(form.monomials) if all(at_limit[departure] for departure in monomial))


def elements_error(side: StageSide) -> FloatArray:
    """Of each stage, the largest error in magnitude that its elements give with an ideal part; shape (stages,).

    The corners of largest and smallest gain are those of the ideal gain too: departures of 0 are part of the box
    over which directions hold.
    """
    size = np.abs(np.nan_to_num(side.corner_error, nan=np.inf))
    largest = np.maximum.reduceat(size, side.first)
    counts = np.diff(np.append(side.first, len(size)))
    candidates = np.where(size == np.repeat(largest, counts), np.arange(len(size)), len(size))
    return side.corner_error[np.minimum.reduceat(candidates, side.first)]


def part_side(form: Form, nominal: FloatArray, worst: FloatArray, evidence: NDArray[np.uint8]) -> PartSide:
    """The products m_k of some parts.

    Parameters
    ----------
    nominal, worst : ndarray, shape (departures, parts)
        The departures, in the order of `DEPARTURES`.
    evidence : ndarray of uint8, shape (departures, parts)
        What `worst` rests on.
    """
    return PartSide(products(form, nominal), products(form, worst), evidence)


def products(form: Form, departures: FloatArray) -> FloatArray:
    """The products m_k, shape (terms, ...), of departures, shape (departures, ...), in the order of `DEPARTURES`."""
    place = {departure.symbol: index for index, departure in enumerate(DEPARTURES)}
    kinds = [place[symbol] for _, symbol in form.departures]
    found = np.ones((len(form.monomials), *departures.shape[1:]))
    for k, monomial in enumerate(form.monomials):
        for departure in monomial:
            found[k] *= departures[kinds[departure]]
    return found


def _tolerance_terms(
    form: Form, nominal: FloatArray, values: FloatArray, tolerances: FloatArray, reference: FloatArray
) -> FloatArray:
    """Share of each element's tolerance in the ideal gain's error at each corner.

    The elements are moved from nominal to the corner one after the other, once in their order and once in the
    reverse order, and each gets the mean of its two steps. The shares sum to the whole exactly, and two
    elements that play the same part get the same share.

    Parameters
    ----------
    nominal, values : ndarray, shape (elements, corners)
    reference : ndarray, shape (corners,)

    Returns
    -------
    ndarray, shape (elements, corners)
    """
    shares = np.zeros_like(values)
    toleranced = np.flatnonzero((tolerances > 0.0).any(axis=1)).tolist()
    for order in (toleranced, toleranced[::-1]):
        moved = nominal.copy()
        before = coefficients.gain_ideal(form, coefficients.at_dc(form, moved))
        for element in order:
            moved[element] = values[element]
            after = coefficients.gain_ideal(form, coefficients.at_dc(form, moved))
            with np.errstate(invalid="ignore"):
                shares[element] += (after - before) / reference / 2.0
            before = after
    return shares


def _matters(
    form: Form, values: FloatArray, tolerances: FloatArray, at_corners: Coefficients, first: NDArray[np.intp]
) -> NDArray[np.bool_]:
    """Whether a departure has a coefficient that is not 0 at every corner of the stage, visited or not."""
    used = np.logical_or.reduceat(_used(at_corners), first, axis=1)
    # A coefficient may vanish by balance at the corners visited, and not at others.
    doubtful = ~used & coefficients.occur(form, coefficients.at_dc(form, values))
    for s in np.flatnonzero(doubtful.any(axis=0) & (tolerances > 0.0).any(axis=0)).tolist():
        moved = np.flatnonzero(tolerances[:, s])
        if len(moved) > MOST_OPEN_ELEMENTS:
            used[:, s] |= doubtful[:, s]
            continue
        is_upper = np.array(list(product((-1.0, 1.0), repeat=len(moved)))).T
        corners = np.repeat(values[:, s, None], is_upper.shape[1], axis=1)
        corners[moved] *= 1.0 + is_upper * tolerances[moved, s, None]
        used[:, s] |= _used(coefficients.evaluate(form, coefficients.at_dc(form, corners))).any(axis=1)
    matters = np.zeros((len(DEPARTURES), values.shape[1]), dtype=bool)
    for index, departure in enumerate(DEPARTURES):
        for k, monomial in enumerate(form.monomials):
            if any(form.departures[i][1] == departure.symbol for i in monomial):
                matters[index] |= used[k]
    return matters


def _used(at: Coefficients) -> NDArray[np.bool_]:
    return np.asarray((at.contrasts != 0.0) | (at.loadings != 0.0))
