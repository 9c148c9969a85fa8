"""Stages whose gain is trimmed out at 25 degrees Celsius: only what moves afterwards counts.

With elements R and departures p at calibration, R f and p' afterwards, the error is

    gain(R f, p') / gain(R, p) - 1 = (e + (1 + e) E' - E)/(1 + E),    e = G_ideal(R f)/G_ideal(R) - 1.

What moves is f (temperature coefficients, ageing) and the departures, from p to p'. Held, but not known, is R within
its tolerances. In each variable that moves the error is a ratio of multi-affine functions, so the corners are its
worst case; over what is held every combination of ends is visited.

A departure is at calibration anywhere within its limit. Afterwards it has changed by no more than the part says;
where the part says nothing it may again be anywhere within its limit. What it is at calibration is held, so that it is
taken to be ideal, too, before and after: each kind of departure in all amplifiers at once. One of either sign is in no
form of calibrated stages: it can turn the direction in which others move the gain, and what is held at a limit on both
sides of the calibration would have to be visited, too.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cache
from itertools import product as combinations

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts.moves import DRIFT, TEMPERATURE, TOLERANCE
from gainassay.forms import coefficients
from gainassay.forms.coefficients import Coefficients, FloatArray
from gainassay.forms.departures import DEPARTURES, PLACE
from gainassay.forms.form import Form
from gainassay.screen.boxes import StageBox, product
from gainassay.screen.corners import PartSide, StageSide, elements_terms, ideal_at_dc, is_regular, matters, monomials
from gainassay.screen.corners import part_side as limits_side
from gainassay.screen.kernel import (
    PAIRS_PER_BLOCK,
    UNBOUNDED,
    Outcome,
    add_products,
    beyond_corners,
    find_dominant,
    in_blocks,
    summed,
    undoing,
)
from gainassay.screen.signs import FIXED, OPEN, Reach
from gainassay.screen.visits import Plan, bits, factors_at, visit, what_is_known, with_a_bound

FALLEN, RISEN, IDEAL = range(3)
"""Places in `PartSide.changed`."""


def stage_side(form: Form, box: StageBox, reached: Reach | None = None) -> StageSide:
    """As `corners.stage_side`, of calibrated stages; errors refer to the gain at calibration.

    Raises
    ------
    InputError
        If more elements move or have a tolerance than can be visited corner by corner.
    """
    box = box.at_dc(form.kinds)
    nominal = coefficients.evaluate(form, coefficients.at_dc(form, box.values))
    reference = np.where(np.isnan(box.targets), nominal.gain_ideal, box.targets)
    known = what_is_known(form, box, reached)
    held, moving = known.box.moved_by([TOLERANCE]), known.box.moved_by([TEMPERATURE, DRIFT])
    variables = len(known.of) - len(form.departures)
    moves, varies = (np.concatenate([part.own.moves(), part.common.moves()]) for part in (moving, held))
    of = np.concatenate(
        [
            np.where(moves, known.of[:variables], np.int8(FIXED)),
            np.where(varies, np.int8(OPEN), np.int8(FIXED)),
            known.of[variables:],
        ]
    )
    visited = visit(form, of[None], bits, form.figures(), 2 * variables)
    stage = visited.stage
    before = box.values[:, stage] * _all(held, stage, visited.is_upper[variables:])
    factors = factors_at(moving, stage, visited.is_upper[:variables])
    after = before * product(factors.own) * product(factors.together)
    was, now = (coefficients.evaluate(form, coefficients.at_dc(form, ohms)) for ohms in (before, after))
    terms = elements_terms(before, factors, was.gain_ideal, ideal_at_dc(form))
    slack = known.slack and known.slack.over(np.log(product(moving.common.high)) - np.log(product(moving.common.low)))
    with np.errstate(invalid="ignore", divide="ignore"):
        error = (now.gain_ideal - was.gain_ideal) / was.gain_ideal
        is_sound = np.isfinite(error)
        for at in (was, now):
            is_sound &= is_regular(form, at, nominal.gain_ideal[stage])
        regular = np.logical_and.reduceat(is_sound, visited.first)
        return StageSide(
            gain_ideal=nominal.gain_ideal,
            reference=reference,
            limits=box.limits,
            set_point=np.zeros(len(box.limits)),
            contrasts=np.zeros_like(nominal.contrasts),
            loadings=np.zeros_like(nominal.loadings),
            first=visited.first,
            corner_values=after,
            corner_contrasts=now.contrasts,
            corner_loadings=now.loadings,
            corner_error=error,
            corner_terms=terms,
            accounts=tuple(form.accounts().values()),
            plans=with_a_bound(tuple(_with_ideal_ones(form, plan) for plan in visited.plans), regular),
            regular=regular,
            matters=matters(form, known.box, now, visited.first),
            untied=known.untied,
            slack=slack,
            at_calibration=was,
        )


@cache
def _ideal_sets(form: Form) -> tuple[tuple[bool, ...], ...]:
    """Which of the form's departures may be ideal throughout: first none, and each set that leaves other products."""
    kinds = [PLACE[symbol] for _, symbol in form.departures]
    different = list(dict.fromkeys(kinds))
    found = {}
    for are_ideal in combinations((False, True), repeat=len(different)):
        ideal = tuple(are_ideal[different.index(kind)] for kind in kinds)
        # Of the sets that leave the same products the last is the largest.
        found[tuple(any(ideal[i] for i in monomial) for monomial in form.monomials)] = ideal
    return tuple(found.values())


def _with_ideal_ones(form: Form, plan: Plan) -> Plan:
    """The corners of a plan, each also with departures that are ideal throughout."""
    found = {
        (j, (which << len(ideal)) + bits([not best and bool(q >> i & 1) for i, best in enumerate(ideal)]))
        for j, q in plan.corners
        for which, ideal in enumerate(_ideal_sets(form))
    }
    return Plan(plan.stages, tuple(sorted(found)))


def corners_of_part(form: Form) -> int:
    """How many corners of a part there are at most."""
    return len(_ideal_sets(form)) << len(form.departures)


def ends(form: Form, q: int) -> tuple[int, ...]:
    """What becomes of each of the form's departures at a corner of the part: `FALLEN`, `RISEN` or `IDEAL`."""
    which, rises = divmod(q, 1 << len(form.departures))
    return tuple(IDEAL if ideal else rises >> index & 1 for index, ideal in enumerate(_ideal_sets(form)[which]))


def _all(box: StageBox, stage: NDArray[np.intp], is_upper: NDArray[np.bool_]) -> FloatArray:
    factors = factors_at(box, stage, is_upper)
    return product(factors.own) * product(factors.together)


def part_side(
    form: Form, room: FloatArray, limits: FloatArray, change: FloatArray, evidence: NDArray[np.uint8]
) -> PartSide:
    """The departures of some parts at and after calibration.

    Parameters
    ----------
    room, limits : ndarray, shape (departures, parts)
        Limits of the departures at calibration and afterwards, in the order of `DEPARTURES`.
    change : ndarray, shape (departures, parts)
        How much the data-sheet quantity may change, up or down as a fraction; inf where nothing is known of it.
    evidence : ndarray of uint8, shape (departures, parts)
        What all this rests on.
    """
    is_reciprocal = np.array([departure.reciprocal for departure in DEPARTURES[: len(room)]])[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        least = np.where(is_reciprocal, 1.0 / (1.0 + change), np.maximum(0.0, 1.0 - change))
        most = np.where(is_reciprocal, np.where(change < 1.0, 1.0 / (1.0 - change), np.inf), 1.0 + change)
        risen = np.where(np.isinf(most), limits, np.minimum(room * most, limits))
        changed = np.array([[room, room * least], [risen / most, risen], np.zeros((2, *room.shape))])
    side = limits_side(form, np.zeros_like(limits), limits, evidence)
    return PartSide(side.nominal, side.worst, side.limits, side.evidence, changed)


def screen(form: Form, stages: StageSide, parts: PartSide, block: int = PAIRS_PER_BLOCK) -> Outcome:
    """As `kernel.screen`, of calibrated stages.

    A pair's corner is the stage's, times the number of corners of a part, plus the part's.
    """
    shape = (len(stages.limits), parts.worst.shape[1])
    corner = np.full(shape, UNBOUNDED, np.int32)
    error = np.full(shape, np.nan)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        for plan, rows, columns in in_blocks(stages, shape[1], block):
            error[rows, columns], corner[rows, columns] = _worst(form, stages, parts, plan.corners, rows, columns)
        beyond = beyond_corners(stages, parts, error)
        np.copyto(corner, UNBOUNDED, where=np.isnan(beyond))
        found = Outcome(
            error_nominal=np.zeros(shape),
            error_worst=error + beyond,
            corner=corner,
            dominant=np.zeros(shape, np.int16),
            dominant_value=np.where(corner == UNBOUNDED, np.nan, 0.0),
            beyond=None if stages.slack is None else beyond,
        )
        every = slice(None)
        find_dominant(account(form, stages, parts, every, every, found), found)
        for row in np.flatnonzero((corner == UNBOUNDED).any(axis=1)):
            pulled = undoing(stages, parts, np.array([row]), every)[0]
            found.dominant[row] = np.where(corner[row] == UNBOUNDED, pulled, found.dominant[row])
    return found


def _worst(
    form: Form,
    stages: StageSide,
    parts: PartSide,
    corners: Sequence[tuple[int, int]],
    rows: NDArray[np.intp],
    columns: slice,
) -> tuple[FloatArray, NDArray[np.int32]]:
    shape = (len(rows), len(range(*columns.indices(parts.worst.shape[1]))))
    worst, corner = np.full(shape, np.nan), np.full(shape, UNBOUNDED, np.int32)
    bounded = np.ones(shape, dtype=bool)
    products = {q: _products(form, parts, q, columns) for q in {q for _, q in corners}}
    for number, (j, q) in enumerate(corners):
        error, is_bounded = _error(stages, stages.first[rows] + j, products[q])
        bounded &= is_bounded & np.isfinite(error)
        larger = np.abs(error) > np.abs(worst) if number else np.ones(shape, dtype=bool)
        np.copyto(worst, error, where=larger)
        np.copyto(corner, j * corners_of_part(form) + q, where=larger)
    return np.where(bounded, worst, np.nan), np.where(bounded, corner, np.int32(UNBOUNDED))


def _error(stages: StageSide, at: NDArray[np.intp], products: FloatArray) -> tuple[FloatArray, NDArray[np.bool_]]:
    """Error at one corner, and whether both denominators are positive there."""
    was, before = _departed(at_calibration(stages), at, products[0])
    now, after = _departed(afterwards(stages), at, products[1])
    e = stages.corner_error[at, None]
    error = (e + (1.0 + e) * now - was) / (1.0 + was)
    return error, (before > 0.0) & (after > 0.0)


def _departed(of: Coefficients, at: NDArray[np.intp], products: FloatArray) -> tuple[FloatArray, FloatArray]:
    """E = sum_k c_k m_k / (1 + sum_k d_k m_k) at corners `at`, and its denominator; products: (terms, parts)."""
    numerator, denominator = np.zeros((2, len(at), products.shape[1]))
    denominator += 1.0
    # Products of departures that are ideal would add 0.
    active = np.flatnonzero(products.any(axis=1))
    contrasts, loadings = (coefficient[active[:, None], at] for coefficient in (of.contrasts, of.loadings))
    add_products(contrasts[..., None], loadings[..., None], products[active], numerator, denominator)
    return numerator / denominator, denominator


def at_calibration(stages: StageSide) -> Coefficients:
    """The coefficient functions at the corners of calibrated stages, as they were at calibration."""
    if stages.at_calibration is None:
        raise ValueError("these stages are not calibrated")
    return stages.at_calibration


def afterwards(stages: StageSide) -> Coefficients:
    """The coefficient functions at the corners."""
    return Coefficients(stages.corner_error, stages.corner_contrasts, stages.corner_loadings)


@dataclass(frozen=True)
class _Departing:
    """The parts of E = sum_k c_k m_k / (1 + sum_k d_k m_k) of some pairs."""

    numerators: tuple[FloatArray, ...]
    denominator: FloatArray

    def error(self) -> FloatArray:
        return _sum(self.numerators, np.zeros_like(self.denominator)) / self.denominator


def _departing(of: Coefficients, at: NDArray[np.intp], products: FloatArray) -> _Departing:
    """At corners `at`; products of shape (terms, parts) or (terms, stages, parts)."""
    loaded = [loading[at] * factor for loading, factor in zip(of.loadings, products, strict=True)]
    return _Departing(
        tuple(contrast[at] * factor for contrast, factor in zip(of.contrasts, products, strict=True)),
        _sum(loaded, np.ones(np.broadcast_shapes(at.shape, products.shape[1:]))),
    )


def _sum(terms: Sequence[FloatArray], start: FloatArray) -> FloatArray:
    """One term after the other, whatever their number."""
    for term in terms:
        start = start + term
    return start


def _products(form: Form, parts: PartSide, q: int, columns: slice) -> FloatArray:
    """The products m_k at and after calibration at a corner of the part; shape (2, terms, parts)."""
    return monomials(form, departures_at(form, parts, q, columns)).swapaxes(0, 1)


def departures_at(form: Form, parts: PartSide, q: int, columns: slice) -> FloatArray:
    """The form's departures at and after calibration at a corner of the part; shape (departures, 2, parts)."""
    assert parts.changed is not None
    values = [
        parts.changed[end, :, PLACE[symbol], columns]
        for end, (_, symbol) in zip(ends(form, q), form.departures, strict=True)
    ]
    return np.array(values)


def account(
    form: Form, stages: StageSide, parts: PartSide, rows: slice, columns: slice, outcome: Outcome
) -> Iterator[FloatArray]:
    """As `kernel.account`, of calibrated stages."""
    corner = outcome.corner[rows, columns]
    j, q = np.divmod(np.maximum(corner, 0), corners_of_part(form))
    at = stages.first[np.arange(*rows.indices(len(stages.limits)))][:, None] + j
    products = np.zeros((2, len(form.monomials), *corner.shape))
    for code in np.unique(q).tolist():
        products = np.where(q == code, _products(form, parts, code, columns)[:, :, None, :], products)
    was, now = _departing(at_calibration(stages), at, products[0]), _departing(afterwards(stages), at, products[1])
    share = 1.0 / (1.0 + was.error())
    yield np.zeros(corner.shape)
    *alone, together = stages.corner_terms
    for shares in alone:
        yield shares[at] * share
    yield together[at] * share + (0.0 if outcome.beyond is None else outcome.beyond[rows, columns])
    lift = 1.0 + stages.corner_error[at]

    def of_product(k: int) -> FloatArray:
        return (lift * now.numerators[k] / now.denominator - was.numerators[k] / was.denominator) * share

    yield from summed(stages.accounts, of_product)
