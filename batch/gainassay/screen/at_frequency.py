"""The screen of stages at their frequencies: complex gains, and the error of their magnitude.

With the complex e of the elements (set-point, tolerances) and E = C/D of the departures, C = sum_k c_k m_k and
D = 1 + sum_k d_k m_k, the gain is the reference times 1 + w,

    w = e + (1 + e) E = W/D,    W = e + sum_k ((1 + e) c_k + e d_k) m_k,

and with w = sum_k e_k the error of its magnitude is

    |1 + w| - 1 = (2 Re w + |w|^2)/(1 + |1 + w|) = sum_k Re(e_k (2 + conj w))/(1 + |1 + w|),

computed so, never as a difference of magnitudes: the terms sum to it exactly, and a small error keeps its digits.
The phase error p is found by way of tan(p/2) = Im w/(|1 + w| + Re(1 + w)), which rises with p all the way round.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts.moves import MOVES
from gainassay.forms.coefficients import Coefficients, ComplexArray, FloatArray
from gainassay.forms.form import Form
from gainassay.screen.corners import SET_POINT, TRACKING, PartSide
from gainassay.screen.kernel import PAIRS_PER_BLOCK, UNBOUNDED, Outcome, put
from gainassay.screen.response import (
    Departing,
    Split,
    over,
    plus,
    polynomial,
    real_product,
    split,
    terms,
    times,
    variables,
)
from gainassay.screen.spots import SpotSide


def part_side(nominal: FloatArray, worst: FloatArray, lag: FloatArray, evidence: NDArray[np.uint8]) -> PartSide:
    """The figures of some parts; products are formed where they meet frequencies.

    Parameters
    ----------
    nominal, worst : ndarray, shape (figures, parts)
        In the order of `FIGURES`.
    lag : ndarray, shape (parts,)
        1/f of the second pole [1/Hz], 0 where there is none.
    evidence : ndarray of uint8, shape (figures, parts)
    """
    return PartSide(np.vstack([nominal, lag]), np.vstack([worst, lag]), worst, evidence)


def term_names(form: Form) -> tuple[str, ...]:
    """As `corners.term_names`, with what rises with frequency told from what does not."""
    elements = (f"{name}.{move}" for name in form.elements for move in MOVES)
    return (SET_POINT, *elements, TRACKING, *(term.name for term in terms(form)))


def screen(form: Form, stages: SpotSide, parts: PartSide, block: int = PAIRS_PER_BLOCK) -> Outcome:
    """As `kernel.screen`: of each pair what is found at the spot, of the stage's, with the largest error."""
    shape = (len(stages.limits), parts.worst.shape[1])
    nominal, worst, half = (np.full(shape, np.nan) for _ in range(3))
    corner = np.full(shape, UNBOUNDED, np.int32)
    with np.errstate(all="ignore"):
        for spots, corners, columns, is_first in _in_blocks(stages, shape[1], block):
            of_nominal = _nominal(form, stages, parts, spots, columns)
            error, code, turn = _worst(form, stages, parts, corners, spots, columns)
            here = (stages.stage[spots], columns)
            if is_first:
                nominal[here], worst[here], corner[here], half[here] = of_nominal, error, code, turn
                continue
            # An error without a bound at one frequency has none at all.
            larger = ~(np.abs(error) <= np.abs(worst[here])) & ~np.isnan(worst[here])
            nominal[here] = np.where(larger, of_nominal, nominal[here])
            worst[here] = np.where(larger, error, worst[here])
            corner[here] = np.where(larger, code, corner[here])
            half[here] = np.where(np.abs(turn) > np.abs(half[here]), turn, half[here])
        half[corner == UNBOUNDED] = np.nan
        found = Outcome(
            error_nominal=nominal,
            error_worst=worst,
            corner=corner,
            dominant=np.zeros(shape, np.int16),
            dominant_value=np.where(corner == UNBOUNDED, np.nan, 0.0),
            phase=np.degrees(2.0 * np.arctan(half)),
        )
        for some in _at_worst(form, stages, parts, corner, block):
            place, value = _largest(some.terms, some.is_here.shape)
            some.put(found.dominant, place)
            some.put(found.dominant_value, value)
    return found


def elements_error(stages: SpotSide) -> FloatArray:
    """As `corners.elements_error`, of magnitudes."""
    error, _ = _turned(None, None, split(stages.corner_error[None]))
    size = np.nan_to_num(np.abs(error[0]), nan=np.inf)
    first = stages.first[stages.begin]
    largest = np.repeat(np.maximum.reduceat(size, first), np.diff(np.append(first, len(size))))
    candidates = np.where(size == largest, np.arange(len(size)), len(size))
    return np.asarray(error[0][np.minimum.reduceat(candidates, first)])


def _in_blocks(
    stages: SpotSide, parts: int, block: int
) -> Iterator[tuple[NDArray[np.intp], tuple[tuple[int, int], ...], slice, bool]]:
    """Blocks of pairs, no stage twice in one.

    Spots that visit the same corners, these corners, some parts, and whether it is the stages' first spot.
    """
    number = np.arange(len(stages.stage)) - stages.begin[stages.stage]
    for place in range(int(number.max(initial=0)) + 1):
        for plan in stages.plans:
            spots = plan.stages[number[plan.stages] == place]
            for rows, columns in _cut((len(spots), parts), block):
                yield spots[rows], plan.corners, columns, place == 0


def _cut(shape: tuple[int, int], block: int) -> Iterator[tuple[slice, slice]]:
    width = max(1, min(shape[1], block))
    height = max(1, block // width)
    for top in range(0, shape[0], height):
        for left in range(0, shape[1], width):
            yield slice(top, min(top + height, shape[0])), slice(left, min(left + width, shape[1]))


def _column(numbers: ComplexArray) -> list[Split]:
    """Coefficients of stages, each as a column beside the parts."""
    return [split(of[:, None]) for of in numbers]


def _turned(numerator: Split | None, denominator: Split | None, e: Split) -> tuple[FloatArray, FloatArray]:
    """|1 + W/D| - 1 and the tangent of half its phase, with e taken into W and 1 into D."""
    w_real, w_imag = (e if numerator is None else plus(e, numerator)).whole()
    d_real, d_imag = (Split(np.ones((1, 1)), None) if denominator is None else denominator).whole()
    if denominator is not None:
        d_real = 1.0 + d_real
    square = d_real * d_real + d_imag * d_imag
    along = w_real * d_real + w_imag * d_imag
    across = w_imag * d_real - w_real * d_imag
    u = (2.0 * along + (w_real * w_real + w_imag * w_imag)) / square
    root = np.sqrt(1.0 + u)
    return u / (1.0 + root), across / (square * root + (square + along))


def _nominal(form: Form, stages: SpotSide, parts: PartSide, spots: NDArray[np.intp], columns: slice) -> FloatArray:
    departing = Departing(form, parts.nominal[:, columns], stages.hertz[spots, None])
    departures = departing.at((1 << len(variables(form))) - 1)
    error, _ = _turned(
        polynomial(form, _column(stages.nominal_rises[:, spots]), departures),
        polynomial(form, _column(stages.nominal.loadings[:, spots]), departures),
        Split(stages.set_point[spots, None], None),
    )
    return error


def _worst(
    form: Form,
    stages: SpotSide,
    parts: PartSide,
    corners: Sequence[tuple[int, int]],
    spots: NDArray[np.intp],
    columns: slice,
) -> tuple[FloatArray, NDArray[np.int32], FloatArray]:
    """The magnitude error of largest magnitude, the corner that gives it, and the largest tangent of half a phase."""
    figures = parts.worst[:, columns]
    shape = (len(spots), figures.shape[1])
    worst, corner, half = np.full(shape, np.nan), np.full(shape, UNBOUNDED, np.int32), np.full(shape, np.nan)
    if not corners:
        return worst, corner, half
    departing, codes = Departing(form, figures, stages.hertz[spots, None]), stages.codes_of(spots)[:, None]
    bounded = np.ones(shape, dtype=bool)
    for number, (j, q) in enumerate(corners):
        at = stages.first[spots] + j
        departures = departing.at(stages.part_corners[q])
        error, turn = _turned(
            polynomial(form, _column(stages.corner_rises[:, at]), departures),
            polynomial(form, _column(stages.corner_loadings[:, at]), departures),
            split(stages.corner_error[at, None]),
        )
        code = codes + np.int32(j * len(stages.part_corners) + q)
        bounded &= np.isfinite(error)
        if not number:
            worst[:], corner[:], half[:] = error, code, turn
            continue
        larger = np.abs(error) > np.abs(worst)
        np.copyto(worst, error, where=larger)
        np.copyto(corner, code, where=larger)
        np.copyto(half, turn, where=np.abs(turn) > np.abs(half))
    if not bounded.all():
        worst[~bounded], corner[~bounded], half[~bounded] = np.nan, UNBOUNDED, np.nan
    return worst, corner, half


def account(
    form: Form, stages: SpotSide, parts: PartSide, outcome: Outcome, block: int = PAIRS_PER_BLOCK
) -> Iterator[FloatArray]:
    """As `kernel.account`, of all pairs, in the order of `term_names`."""
    shape = outcome.corner.shape
    found = np.zeros((len(term_names(form)), *shape))
    with np.errstate(all="ignore"):
        for some in _at_worst(form, stages, parts, outcome.corner, block):
            for whole, term in zip(found, some.terms, strict=True):
                if term is not None:
                    some.put(whole, term)
    yield from found


def nominal_account(form: Form, stages: SpotSide, parts: PartSide, outcome: Outcome) -> Iterator[FloatArray]:
    """As `kernel.nominal_account`, at the spots of the worst errors."""
    spot = stages.spot_of(outcome.corner)
    found = np.zeros((len(term_names(form)), *spot.shape))
    every = (1 << len(variables(form))) - 1
    with np.errstate(all="ignore"):
        for place in np.unique(spot).tolist():
            one = np.array([place])
            set_point = stages.set_point[one]
            of = Coefficients(set_point, stages.nominal.contrasts[:, one], stages.nominal.loadings[:, one])
            nothing = np.zeros((len(stages.corner_terms), 1), np.complex128)
            departing = Departing(form, parts.nominal, stages.hertz[one, None])
            row = stages.stage[place]
            for whole, term in zip(found, _terms(form, departing, every, set_point, of, nothing), strict=True):
                if term is not None:
                    whole[row] = np.where(spot[row] == place, term, whole[row])
    yield from found


@dataclass(frozen=True)
class _Some:
    """Some pairs of which some have their worst error at one corner.

    Attributes
    ----------
    stages : ndarray of int, shape (rows,)
    is_here : ndarray of bool, shape (rows, columns)
    terms : iterator
        The terms at that corner, each of shape (rows, columns) or one that broadcasts to it; None: 0.
    """

    stages: NDArray[np.intp]
    columns: slice
    is_here: NDArray[np.bool_]
    terms: Iterator[FloatArray | None]

    def put(self, whole: NDArray[Any], values: NDArray[Any]) -> None:
        """Put values where they are of the pairs that are here."""
        is_all = bool(self.is_here.all())
        whole[self.stages, self.columns] = (
            values if is_all else np.where(self.is_here, values, whole[self.stages, self.columns])
        )


def _at_worst(form: Form, stages: SpotSide, parts: PartSide, corner: NDArray[np.int32], block: int) -> Iterator[_Some]:
    """All pairs at the corners that give their worst errors."""
    for spots, corners, columns, _ in _in_blocks(stages, corner.shape[1], block):
        own, codes = corner[stages.stage[spots], columns], stages.codes_of(spots)[:, None]
        for j, q in corners:
            is_here = own == codes + np.int32(j * len(stages.part_corners) + q)
            rows = np.flatnonzero(is_here.any(axis=1))
            if not len(rows):
                continue
            there = spots[rows]
            at = stages.first[there] + j
            of = Coefficients(stages.corner_error[at], stages.corner_contrasts[:, at], stages.corner_loadings[:, at])
            departing = Departing(form, parts.worst[:, columns], stages.hertz[there, None])
            found = _terms(
                form, departing, stages.part_corners[q], stages.set_point[there], of, stages.corner_terms[:, at]
            )
            yield _Some(stages.stage[there], columns, is_here[rows], found)


def _largest(terms: Iterator[FloatArray | None], shape: tuple[int, ...]) -> tuple[NDArray[np.int16], FloatArray]:
    """Place and value of the term of largest magnitude, the first of equals."""
    place, value, magnitude = np.zeros(shape, np.int16), np.zeros(shape), np.zeros(shape)
    size, larger, mark = np.empty(shape), np.empty(shape, dtype=bool), np.empty(shape, np.int16)
    for number, term in enumerate(terms):
        if term is None:
            continue
        np.abs(term, out=size)
        np.greater(size, magnitude, out=larger)
        np.maximum(magnitude, size, out=magnitude)
        put(value, np.broadcast_to(term, shape), larger)
        # Places rise: the largest is the last that exceeded all before it, so the first of the largest.
        np.maximum(place, np.multiply(larger.view(np.int8), np.int16(number), out=mark), out=place)
    return place, value


def _terms(
    form: Form,
    departing: Departing,
    ends: int,
    set_point: FloatArray,
    of: Coefficients,
    elements: ComplexArray,
) -> Iterator[FloatArray | None]:
    """The terms of pairs at a corner of the parts, from what is theirs at one of the stages; None: 0 for all.

    Parameters
    ----------
    set_point : ndarray, shape (stages,)
    of : Coefficients
        With e as `gain_ideal`; shape (..., stages).
    elements : ndarray, shape (moves x elements + 1, stages)
    """
    e, one, nothing = split(of.gain_ideal[:, None]), Split(np.ones((1, 1)), None), Split(None, None)
    contrasts, departures = _column(of.contrasts), departing.at(ends)
    below = polynomial(form, _column(of.loadings), departures)
    lift = over(plus(e, one), plus(below, one))
    above = polynomial(form, contrasts, departures) or nothing
    w_real, w_imag = plus(e, times(lift, above)).whole()
    size = 1.0 + np.sqrt((1.0 + w_real) ** 2 + w_imag**2)
    share = Split((2.0 + w_real) / size, -w_imag / size)
    yield real_product(split(set_point[:, None]), share)
    for moved in elements:
        yield real_product(split(moved[:, None]), share)
    lifted: dict[Factors, Split | None] = {(): times(lift, share)}
    for term in terms(form):
        total: FloatArray | None = None
        for addend in term.addends:
            factor = _lifted(lifted, departing, ends, addend.factors)
            value = None if factor is None else real_product(contrasts[addend.product], factor)
            total = value if total is None or value is None else total + value
        yield total


Factors = tuple[tuple[int, int], ...]


def _lifted(found: dict[Factors, Split | None], departing: Departing, ends: int, factors: Factors) -> Split | None:
    """What is to be multiplied by n_k - d_k: the lift times the factors of an addend, each product found once."""
    if factors not in found:
        before = _lifted(found, departing, ends, factors[:-1])
        factor = departing.taken(ends, *factors[-1])
        found[factors] = None if before is None or factor is None else times(before, factor)
    return found[factors]
