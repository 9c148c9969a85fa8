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

from gainassay.forms.coefficients import FloatArray
from gainassay.forms.form import Form
from gainassay.screen import bands
from gainassay.screen.corners import PartSide, largest_of_each, stage_terms
from gainassay.screen.kernel import NO_TERM, PAIRS_PER_BLOCK, UNBOUNDED, Outcome, cut, put
from gainassay.screen.response import Departing, Meeting, errors, every, polynomial, terms, turned
from gainassay.screen.split import ONE, Split, over, plus, real_product, split, splits, times
from gainassay.screen.spots import SpotSide


def part_side(nominal: FloatArray, worst: FloatArray, lags: FloatArray, evidence: NDArray[np.uint8]) -> PartSide:
    """The figures of some parts; products are formed where they meet frequencies.

    Parameters
    ----------
    nominal, worst : ndarray, shape (figures, parts)
        In the order of `FIGURES`.
    lags : ndarray, shape (2, parts)
        What is taken as it stands: the rows of `response.LAGGING` [1/Hz], 0 where there is none.
    evidence : ndarray of uint8, shape (figures, parts)
    """
    return PartSide(np.vstack([nominal, lags]), np.vstack([worst, lags]), worst, evidence)


def term_names(form: Form) -> tuple[str, ...]:
    """As `corners.term_names`, with what rises with frequency told from what does not."""
    return (*stage_terms(form), *(term.name for term in terms(form)))


def screen(form: Form, stages: SpotSide, parts: PartSide, block: int = PAIRS_PER_BLOCK) -> Outcome:
    """As `kernel.screen`: of each pair what is found at the frequency, of the stage's, with the largest error."""
    shape = (len(stages.limits), parts.worst.shape[1])
    nominal, worst, half, hertz = (np.full(shape, np.nan) for _ in range(4))
    corner = np.full(shape, UNBOUNDED, np.int32)
    with np.errstate(all="ignore"):
        for spots, corners, columns, is_first in _in_blocks(stages, shape[1], block):
            of_nominal = _nominal(form, stages, parts, spots, columns)
            error, code, turn = _worst(form, stages, parts, corners, spots, columns)
            here = (stages.stage[spots], columns)
            where = stages.hertz[spots, None]
            if is_first:
                nominal[here], worst[here], corner[here], half[here], hertz[here] = of_nominal, error, code, turn, where
                continue
            # An error without a bound at one frequency has none at all.
            larger = ~(np.abs(error) <= np.abs(worst[here])) & ~np.isnan(worst[here])
            nominal[here] = np.where(larger, of_nominal, nominal[here])
            worst[here] = np.where(larger, error, worst[here])
            corner[here] = np.where(larger, code, corner[here])
            hertz[here] = np.where(larger, where, hertz[here])
            half[here] = np.where(np.abs(turn) > np.abs(half[here]), turn, half[here])
        half[corner == UNBOUNDED] = np.nan
        found = Outcome(
            error_nominal=nominal,
            error_worst=worst,
            corner=corner,
            dominant=np.where(corner == UNBOUNDED, np.int16(NO_TERM), np.int16(0)),
            dominant_value=np.where(corner == UNBOUNDED, np.nan, 0.0),
            phase=np.degrees(2.0 * np.arctan(half)),
            hertz=hertz,
        )
        bands.refine(form, stages, parts, found)
        for some in _at_worst(form, stages, parts, found, block):
            place, value = _largest(some.terms, some.is_here.shape)
            some.put(found.dominant, place)
            some.put(found.dominant_value, value)
    return found


def gains(form: Form, stages: SpotSide, outcome: Outcome) -> tuple[FloatArray, FloatArray]:
    """The ideal gain of each pair and the gain that its errors refer to, where its worst error lies [gain unit]."""
    assert outcome.hertz is not None
    shape = outcome.hertz.shape
    gain_ideal, reference = (
        np.repeat(gain[:, None], shape[1], axis=1) for gain in (stages.gain_ideal, stages.reference)
    )
    for row in np.flatnonzero(np.bincount(stages.stage) > 1).tolist():
        gain_ideal[row], reference[row] = bands.gains(form, stages, row, outcome.hertz[row])
    return gain_ideal, reference


def elements_error(stages: SpotSide) -> FloatArray:
    """As `corners.elements_error`, of magnitudes."""
    error, _ = turned(None, None, split(stages.corner_error[None]))
    return largest_of_each(error[0], stages.first[stages.begin])


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
            for rows, columns in cut((len(spots), parts), block):
                yield spots[rows], plan.corners, columns, place == 0


def _nominal(form: Form, stages: SpotSide, parts: PartSide, spots: NDArray[np.intp], columns: slice) -> FloatArray:
    departing = Departing(form, parts.nominal[:, columns], stages.hertz[spots, None])
    return errors(form, stages.nominally(spots), departing, every(form))[0]


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
        error, turn = errors(form, stages.at(spots, j), departing, stages.part_corners[q])
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
    found = np.zeros((len(term_names(form)), *outcome.corner.shape))
    with np.errstate(all="ignore"):
        for some in _at_worst(form, stages, parts, outcome, block):
            some.fill(found)
    yield from found


def nominal_account(form: Form, stages: SpotSide, parts: PartSide, outcome: Outcome) -> Iterator[FloatArray]:
    """As `kernel.nominal_account`, at the frequencies of the worst errors."""
    assert outcome.hertz is not None
    found = np.zeros((len(term_names(form)), *outcome.corner.shape))
    with np.errstate(all="ignore"):
        for row, hertz in enumerate(outcome.hertz):
            here = bands.meeting(form, stages, row, None, hertz)
            departing = Departing(form, parts.nominal, hertz[None])
            everywhere = np.ones((1, len(hertz)), dtype=bool)
            _Some(np.array([row]), slice(None), everywhere, _terms(form, departing, every(form), here)).fill(found)
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
    columns: slice | NDArray[np.intp]
    is_here: NDArray[np.bool_]
    terms: Iterator[FloatArray | None]

    def put(self, whole: NDArray[Any], values: NDArray[Any]) -> None:
        """Put values where they are of the pairs that are here."""
        is_all = bool(self.is_here.all())
        whole[self.stages, self.columns] = (
            values if is_all else np.where(self.is_here, values, whole[self.stages, self.columns])
        )

    def fill(self, whole: NDArray[np.float64]) -> None:
        """Put the terms, the first axis of `whole`, where they are of the pairs that are here."""
        for place, term in enumerate(self.terms):
            if term is not None:
                self.put(whole[place], term)


def _at_worst(form: Form, stages: SpotSide, parts: PartSide, found: Outcome, block: int) -> Iterator[_Some]:
    """All pairs at the corners that give their worst errors."""
    has_spots = ~stages.is_band[stages.stage]
    for spots, corners, columns, _ in _in_blocks(stages, found.corner.shape[1], block):
        own, codes = found.corner[stages.stage[spots], columns], stages.codes_of(spots)[:, None]
        for j, q in corners:
            is_here = own == codes + np.int32(j * len(stages.part_corners) + q)
            rows = np.flatnonzero(is_here.any(axis=1) & has_spots[spots])
            if len(rows):
                there = spots[rows]
                departing = Departing(form, parts.worst[:, columns], stages.hertz[there, None])
                of_these = _terms(form, departing, stages.part_corners[q], stages.at(there, j))
                yield _Some(stages.stage[there], columns, is_here[rows], of_these)
    for row in bands.rows(stages):
        for places, at, ends in bands.at_worst(stages, row, found.corner[row]):
            assert found.hertz is not None
            hertz = found.hertz[row, places]
            departing = Departing(form, parts.worst[:, places], hertz[None])
            of_these = _terms(form, departing, ends, bands.meeting(form, stages, row, at, hertz))
            yield _Some(np.array([row]), places, np.ones((1, len(places)), dtype=bool), of_these)


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


def _terms(form: Form, departing: Departing, ends: int, here: Meeting) -> Iterator[FloatArray | None]:
    """The terms of pairs at a corner of the parts; None: 0 for all."""
    e, nothing = split(here.error), Split(None, None)
    contrasts, departures = splits(here.contrasts), departing.at(ends)
    below = polynomial(form, splits(here.loadings), departures) or nothing
    lift = over(plus(e, ONE), plus(below, ONE))
    above = polynomial(form, contrasts, departures) or nothing
    w_real, w_imag = plus(e, times(lift, above)).whole()
    size = 1.0 + np.sqrt((1.0 + w_real) ** 2 + w_imag**2)
    share = Split((2.0 + w_real) / size, -w_imag / size)
    yield real_product(split(here.set_point), share)
    for moved in here.terms:
        yield real_product(split(moved), share)
    lifted: dict[Factors, Split | None] = {(): times(lift, share)}
    for term in terms(form):
        total: FloatArray | None = None
        for addend in term.addends:
            factor = _lifted(lifted, departing, ends, addend.factors)
            value = None if factor is None else real_product(contrasts[addend.product], factor)
            if value is not None:
                total = value if total is None else total + value
        yield total


Factors = tuple[tuple[int, int], ...]


def _lifted(found: dict[Factors, Split | None], departing: Departing, ends: int, factors: Factors) -> Split | None:
    """What is to be multiplied by n_k - d_k: the lift times the factors of an addend, each product found once."""
    if factors not in found:
        before = _lifted(found, departing, ends, factors[:-1])
        factor = departing.taken(ends, *factors[-1])
        found[factors] = None if before is None or factor is None else times(before, factor)
    return found[factors]
