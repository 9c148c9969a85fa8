"""The two sides of a screen before they meet: stages at every corner of their tolerances, parts at their limits.

A corner of a pair is a corner of the stage (each element, and what the elements of a network have in common, at its
lower or upper end) together with a corner of the part (each departure at 0 or at its limit). At a corner of the
part the products m_k are either what the limits give or 0, so its corners come down to sets of *active* products,
most of them shared.

Where `signs` proves in which direction a variable moves the gain, only the end is visited at which the gain is
largest and the one at which it is smallest; of the other variables every combination of ends. What is visited
depends on the stage and on the whole parts table, never on other stages nor on how the pairs are cut.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from itertools import product

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts.moves import MOVES
from gainassay.forms import coefficients
from gainassay.forms.coefficients import AnyArray, Coefficients, FloatArray
from gainassay.forms.departures import DEPARTURES, PLACE
from gainassay.forms.form import Form
from gainassay.screen.boxes import StageBox
from gainassay.screen.boxes import product as product_of_moves
from gainassay.screen.signs import Reach
from gainassay.screen.tracking import Slack
from gainassay.screen.visits import (
    MOST_OPEN_ELEMENTS,
    Factors,
    Plan,
    bits,
    factors_at,
    visit,
    what_is_known,
    with_a_bound,
)

SET_POINT = "set_point"
TRACKING = "tracking"
"""The term of what the members of networks do together."""

MOST_LISTED = 14
"""Departures whose corners are listed: those of two amplifiers."""


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
    corner_terms : ndarray, shape (moves x elements + 1, corners)
        Share of each of `MOVES` of each element, then of what the members of all networks do together, in that; with
        `set_point` they sum to it.
    accounts : tuple[tuple[int, ...], ...]
        Places of the products m_k in each term of the part's account, in the order of `term_names`.
    plans : tuple[Plan, ...]
        Which corners to visit; every stage is in one of them.
    regular : ndarray of bool, shape (stages,)
        Whether, at every corner, all is finite, the ideal gain keeps its sign and the feedback is negative.
    matters : ndarray of bool, shape (departures, stages)
        Whether a departure, of any amplifier, has a coefficient that is not zero.
    untied : ndarray of bool, shape (stages,)
        Whether networks are taken not to track, since nothing bounds the gain between the ends of their common factor.
    slack : Slack or None
        How far it may lie beyond the ends; none if no stage has a network that tracks.
    at_calibration : Coefficients or None
        The coefficient functions at each corner as they were when the stages were calibrated; none if they are not.
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
    accounts: tuple[tuple[int, ...], ...]
    plans: tuple[Plan, ...]
    regular: NDArray[np.bool_]
    matters: NDArray[np.bool_]
    untied: NDArray[np.bool_]
    slack: Slack | None
    at_calibration: Coefficients | None = None

    def stages_of(self, plan: Plan) -> NDArray[np.intp]:
        """The stages that a plan is about."""
        return plan.stages


@dataclass(frozen=True)
class PartSide:
    """What the kernel needs of some parts for one form.

    Attributes
    ----------
    nominal, worst : ndarray, shape (terms, parts)
        The products m_k at the nominal figures, and with every departure at its limit; at a frequency these figures
        themselves, as `at_frequency.part_side` gives them.
    limits : ndarray, shape (departures, parts)
        The departures at their limits, in the order of `DEPARTURES`; at a frequency, of `FIGURES`.
    evidence : ndarray of uint8, shape (departures, parts)
        What each limit rests on.
    changed : ndarray, shape (3, 2, departures, parts), or None
        For calibrated stages, the departures at and after calibration: as they fall most, as they rise most, and ideal.
    """

    nominal: FloatArray
    worst: FloatArray
    limits: FloatArray
    evidence: NDArray[np.uint8]
    changed: FloatArray | None = None

    def part(self, parts: slice) -> PartSide:
        """Some of the parts."""
        return PartSide(
            self.nominal[:, parts],
            self.worst[:, parts],
            self.limits[:, parts],
            self.evidence[:, parts],
            None if self.changed is None else self.changed[..., parts],
        )

    def at(self, places: NDArray[np.intp]) -> PartSide:
        """The parts at some places, row after row in memory as the kernel reads them."""
        return PartSide(
            np.take(self.nominal, places, axis=1),
            np.take(self.worst, places, axis=1),
            np.take(self.limits, places, axis=1),
            np.take(self.evidence, places, axis=1),
            None if self.changed is None else np.take(self.changed, places, axis=-1),
        )


def term_names(form: Form) -> tuple[str, ...]:
    """Names of all terms of a row's account, in its order: set-point, elements, networks, departures."""
    return (*stage_terms(form), *form.accounts())


def stage_terms(form: Form) -> tuple[str, ...]:
    """Names of the terms that stand first in every account: set-point, elements, networks."""
    return (SET_POINT, *(f"{name}.{move}" for name in form.elements for move in MOVES), TRACKING)


def moving_terms(names: tuple[str, ...], box: StageBox) -> tuple[str, ...]:
    """Those of the names of an account's terms that are not 0 from the outset for all of these stages."""
    own = (box.own.low < box.own.high).any(axis=2).T
    of_stage: list[bool] = [True, *own.ravel().tolist(), bool(box.common.moves().any())]
    moves = [*of_stage, *[True] * (len(names) - len(of_stage))]
    return tuple(name for name, moving in zip(names, moves, strict=True) if moving)


@dataclass(frozen=True)
class ActiveSets(Sequence[tuple[int, ...]]):
    """The sets of products m_k that are not 0 at some corner of the departures' box, each in a place of its own.

    Every amplifier's departures are taken for themselves: two amplifiers of one part number need not share
    their errors. Of a form with more than `MOST_LISTED` departures a set's place is the number whose bits say which
    of them are at their limits, and a set may stand in several places.

    Attributes
    ----------
    masks : tuple[int, ...]
        For each product the departures in it, as bits.
    departures : int
        How many there are.
    places : Mapping[tuple[int, ...], int] or None
        The place of each set, smallest sets first; none if they are too many to list.
    """

    masks: tuple[int, ...]
    departures: int
    places: Mapping[tuple[int, ...], int] | None
    listed: tuple[tuple[int, ...], ...]

    def __len__(self) -> int:
        return 1 << self.departures if self.places is None else len(self.listed)

    def __getitem__(self, place: int) -> tuple[int, ...]:  # type: ignore[override]
        return _active(self.masks, place) if self.places is None else self.listed[place]

    def place(self, at_limit: Sequence[bool]) -> int:
        """The place of the set where the marked departures are at their limits and the others 0."""
        marked = bits(at_limit)
        return marked if self.places is None else self.places[_active(self.masks, marked)]


@cache
def active_sets(form: Form) -> ActiveSets:
    """The corners of a part, as sets of products."""
    masks, count = tuple(sum(1 << i for i in monomial) for monomial in form.monomials), len(form.departures)
    if count > MOST_LISTED:
        return ActiveSets(masks, count, None, ())
    sets = sorted({_active(masks, bits) for bits in range(1 << count)}, key=lambda active: (len(active), active))
    return ActiveSets(masks, count, {active: place for place, active in enumerate(sets)}, tuple(sets))


def _active(masks: Sequence[int], bits: int) -> tuple[int, ...]:
    """The products m_k whose departures are all among the marked ones."""
    return tuple(k for k, mask in enumerate(masks) if not mask & ~bits)


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
    box = box.at_dc(form.kinds)
    nominal = coefficients.evaluate(form, coefficients.at_dc(form, box.values))
    reference = np.where(np.isnan(box.targets), nominal.gain_ideal, box.targets)
    known = what_is_known(form, box, reached)
    variables = len(known.of) - len(form.departures)
    visited = visit(form, known.of[None], active_sets(form).place, form.figures(), variables)
    stage, box = visited.stage, known.box
    factors = factors_at(box, stage, visited.is_upper)
    values = box.values[:, stage] * product_of_moves(factors.own) * product_of_moves(factors.together)
    at_corners = coefficients.evaluate(form, coefficients.at_dc(form, values))
    terms = elements_terms(box.values[:, stage], factors, reference[stage], ideal_at_dc(form))
    with np.errstate(invalid="ignore"):
        corner_error = (at_corners.gain_ideal - reference[stage]) / reference[stage]
        is_sound = is_regular(form, at_corners, nominal.gain_ideal[stage]) & np.isfinite(corner_error)
        regular = np.logical_and.reduceat(is_sound, visited.first)
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
            accounts=tuple(form.accounts().values()),
            plans=with_a_bound(visited.plans, regular),
            regular=regular,
            matters=matters(form, box, at_corners, visited.first),
            untied=known.untied,
            slack=known.slack,
        )


def is_regular(form: Form, at: Coefficients, gain_ideal: FloatArray) -> NDArray[np.bool_]:
    """Whether all is finite, the ideal gain has its sign and the feedback is negative, at each corner."""
    return np.asarray(
        np.isfinite(at.contrasts).all(axis=0)
        & np.isfinite(at.loadings).all(axis=0)
        & np.isfinite(at.gain_ideal)
        & (np.sign(at.gain_ideal) == np.sign(gain_ideal))
        & ~coefficients.is_feedback_positive(form, at)
    )


def elements_error(side: StageSide) -> FloatArray:
    """Of each stage, the largest error in magnitude that its elements give with an ideal part; shape (stages,).

    The corners of largest and smallest gain are those of the ideal gain too: departures of 0 are part of the box
    over which directions hold.
    """
    return largest_of_each(side.corner_error, side.first)


def largest_of_each(error: FloatArray, first: NDArray[np.intp]) -> FloatArray:
    """Of each stage, whose corners begin at `first`, the first error of largest magnitude; shape (stages,)."""
    size = np.abs(np.nan_to_num(error, nan=np.inf))
    largest = np.maximum.reduceat(size, first)
    counts = np.diff(np.append(first, len(size)))
    candidates = np.where(size == np.repeat(largest, counts), np.arange(len(size)), len(size))
    return np.asarray(error[np.minimum.reduceat(candidates, first)])


def part_side(form: Form, nominal: FloatArray, worst: FloatArray, evidence: NDArray[np.uint8]) -> PartSide:
    """The products m_k of some parts.

    Parameters
    ----------
    nominal, worst : ndarray, shape (departures, parts)
        The departures, in the order of `DEPARTURES`.
    evidence : ndarray of uint8, shape (departures, parts)
        What `worst` rests on.
    """
    return PartSide(products(form, nominal), products(form, worst), worst, evidence)


def products(form: Form, of_part: AnyArray) -> AnyArray:
    """The products m_k, shape (terms, ...), of departures of a part, in the order of `DEPARTURES`."""
    return monomials(form, by_amplifier(form, of_part))


def by_amplifier(form: Form, of_part: AnyArray) -> AnyArray:
    """Departures of a part, in the order of `DEPARTURES`, handed to every amplifier; in the order of the form's."""
    return of_part[[PLACE[symbol] for _, symbol in form.departures]]


def figure_names(form: Form) -> tuple[str, ...]:
    """The data-sheet quantity behind each of `Form.figures`, with its amplifier where there are several."""
    several = len({amplifier for amplifier, _ in form.departures}) > 1
    names = []
    for amplifier, symbol in (form.departures[first] for first, *_ in form.figures()):
        departure = DEPARTURES[PLACE[symbol]]
        where = departure.places[departure.symbols.index(symbol) :][:1]
        names.append(".".join([amplifier] * several + [departure.quantity, *where]))
    return tuple(names)


def monomials(form: Form, departures: AnyArray) -> AnyArray:
    """The products m_k of departures; shape (terms, ...) from (the form's departures, ...)."""
    found = np.ones((len(form.monomials), *departures.shape[1:]), departures.dtype)
    for product_k, monomial in zip(found, form.monomials, strict=True):
        for departure in monomial:
            product_k *= departures[departure]
    return found


def ideal_at_dc(form: Form) -> Callable[[FloatArray], FloatArray]:
    """The ideal gain of given elements at 0 Hz."""
    return lambda values: coefficients.gain_ideal(form, coefficients.at_dc(form, values))


def elements_terms(
    nominal: FloatArray, factors: Factors, reference: AnyArray, ideal: Callable[[FloatArray], AnyArray]
) -> AnyArray:
    """Share of what moves each element, and all networks, in the ideal gain's error at each corner.

    The elements are moved from nominal to the corner one step after the other, once in their order and once in the
    reverse order, and each step's share is the mean of the two. The shares sum to the whole, and two elements that
    play the same part get the same share.

    Parameters
    ----------
    nominal : ndarray, shape (elements, corners)
    reference : ndarray, shape (corners,)
    ideal : callable
        The ideal gain of given elements at each corner.

    Returns
    -------
    ndarray, shape (moves x elements + 1, corners)
    """
    elements = len(nominal)
    shares = np.zeros((len(MOVES) * elements + 1, nominal.shape[1]), reference.dtype)
    steps = [
        (element * len(MOVES) + move, slice(element, element + 1), factors.own[move, element])
        for element in range(elements)
        for move in range(len(MOVES))
    ]
    steps.append((elements * len(MOVES), slice(0, elements), product_of_moves(factors.together)))
    steps = [step for step in steps if (step[2] != 1.0).any()]
    for order in (steps, steps[::-1]):
        moved = nominal.copy()
        before = ideal(moved)
        for row, which, factor in order:
            moved[which] *= factor
            after = ideal(moved)
            with np.errstate(invalid="ignore"):
                shares[row] += coefficients.over(after - before, reference) / 2.0
            before = after
    return shares


def matters(form: Form, box: StageBox, at_corners: Coefficients, first: NDArray[np.intp]) -> NDArray[np.bool_]:
    """Whether a departure has a coefficient that is not 0 at every corner of the stage, visited or not."""
    values, moves = box.values, box.own.moves() | (box.network >= 0)
    used = np.logical_or.reduceat(_used(at_corners), first, axis=1)
    # A coefficient may vanish by balance at the corners visited, and not at others.
    doubtful = ~used & coefficients.occur(form, coefficients.at_dc(form, values))
    ends = np.stack(box.ends())
    for s in np.flatnonzero(doubtful.any(axis=0) & moves.any(axis=0)).tolist():
        moved = np.flatnonzero(moves[:, s])
        if len(moved) > MOST_OPEN_ELEMENTS:
            used[:, s] |= doubtful[:, s]
            continue
        is_upper = np.array(list(product((0, 1), repeat=len(moved)))).T
        corners = np.repeat(values[:, s, None], is_upper.shape[1], axis=1)
        corners[moved] *= ends[is_upper, moved[:, None], s]
        used[:, s] |= _used(coefficients.evaluate(form, coefficients.at_dc(form, corners))).any(axis=1)
    matters = np.zeros((len(DEPARTURES), values.shape[1]), dtype=bool)
    for k, monomial in enumerate(form.monomials):
        matters[list({PLACE[form.departures[i][1]] for i in monomial})] |= used[k]
    return matters


def _used(at: Coefficients) -> NDArray[np.bool_]:
    return np.asarray((at.contrasts != 0.0) | (at.loadings != 0.0))
