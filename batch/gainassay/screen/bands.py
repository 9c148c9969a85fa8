"""Stages whose signal may have any frequency of a band: each pair at the frequency at which its own error is largest.

The spots of a stage (`spots.spots_of`) are points of its band. From the point with the largest error, at the corner
that gives it, the search goes on between its neighbours, to `TOLERANCE` of the frequency.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from gainassay.forms import coefficients
from gainassay.forms.coefficients import ComplexArray, FloatArray, InS, over, times
from gainassay.forms.form import Form
from gainassay.screen.boxes import product
from gainassay.screen.corners import PartSide, elements_terms
from gainassay.screen.kernel import UNBOUNDED, Outcome
from gainassay.screen.response import Departing, Meeting, errors, every
from gainassay.screen.spots import POINTS_PER_DECADE, SpotSide, magnitude_of, rises
from gainassay.screen.visits import Factors

TOLERANCE = 1e-5
"""Of the frequency of the largest error. An error near its largest changes by far less."""

SECTION = (math.sqrt(5.0) - 1.0) / 2.0
"""By how much a golden section shortens an interval."""

SECTIONS = math.ceil(math.log(TOLERANCE / (10.0 ** (2.0 / POINTS_PER_DECADE) - 1.0)) / math.log(SECTION))
"""Enough for the widest interval: two steps between points."""

STEP = 1e-4
"""By what share of its frequency an end of a band is left to see whether the error rises inside."""

WORTH = 0.3
"""The share of a pair's largest error at a point that a corner must have there to be searched."""

PAIRS_AT_A_TIME = 8_192

Corners = tuple[NDArray[np.intp], NDArray[np.intp], int]
"""Parts, the corner of the stage that each of them is at, and the corner of the parts."""


def rows(stages: SpotSide) -> list[int]:
    """The stages with a band."""
    return [int(row) for row in np.flatnonzero(stages.is_band)]


def at_worst(stages: SpotSide, row: int, corner: NDArray[np.int32]) -> Iterator[Corners]:
    """The corners at which parts have their worst errors with a stage, a corner of the parts after the other."""
    bounded = np.flatnonzero(corner != UNBOUNDED)
    of_stage, q = np.divmod(corner[bounded], len(stages.part_corners))
    for place in np.unique(q).tolist():
        here = np.flatnonzero(q == place)
        for left in range(0, len(here), PAIRS_AT_A_TIME):
            some = here[left : left + PAIRS_AT_A_TIME]
            yield bounded[some], stages.first[stages.begin[row]] + of_stage[some], stages.part_corners[place]


def meeting(form: Form, stages: SpotSide, row: int, at: NDArray[np.intp] | None, hertz: FloatArray) -> Meeting:
    """A stage at frequencies [Hz], each where it meets one part: at corners, or nominally."""
    elements, nothing = stages.box.values[:, row, None], np.ones((1, len(stages.box.values), len(hertz)))
    nominal = np.repeat(elements, len(hertz), axis=1)
    factors = Factors(nothing, nothing)
    if at is not None:
        factors = Factors(stages.factors.own[:, :, at], stages.factors.together[:, :, at])

    def ideal(values: FloatArray) -> ComplexArray:
        return coefficients.gain_ideal(form, coefficients.at_frequency(form, values, hertz))

    nominal_ideal = ideal(nominal)
    gain_ideal, reference = _magnitudes(stages, row, nominal_ideal)
    complex_reference = times(nominal_ideal, reference / gain_ideal)
    values = nominal * product(factors.own) * product(factors.together)
    of = coefficients.evaluate(form, coefficients.at_frequency(form, values, hertz))
    error = over(of.gain_ideal - complex_reference, complex_reference)
    return Meeting(
        ((gain_ideal - reference) / reference)[None],
        error[None],
        rises(of, error)[:, None],
        of.contrasts[:, None],
        of.loadings[:, None],
        elements_terms(nominal, factors, complex_reference, ideal)[:, None]
        if at is not None
        else np.zeros((len(stages.corner_terms), 1, 1), np.complex128),
    )


def gains(form: Form, stages: SpotSide, row: int, hertz: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Magnitudes of the ideal gain of a stage and of the gain that errors refer to, at frequencies [gain unit]."""
    values = np.repeat(stages.box.values[:, row, None], len(hertz), axis=1)
    return _magnitudes(stages, row, coefficients.gain_ideal(form, coefficients.at_frequency(form, values, hertz)))


def _magnitudes(stages: SpotSide, row: int, ideal: ComplexArray) -> tuple[FloatArray, FloatArray]:
    magnitude = magnitude_of(ideal)
    target = stages.box.targets[row]
    return magnitude, magnitude if np.isnan(target) else np.full(len(ideal), abs(target))


@dataclass(frozen=True)
class _Pairs:
    """A stage with some parts, at corners of the stage, one each, and a corner of the parts.

    Attributes
    ----------
    nominal, corners : InS
        Of the stage, with nominal values and at its corners; `at` counts the latter from its first.
    figures : ndarray, shape (ROWS, parts)
        As in `PartSide.worst`.
    """

    form: Form
    stages: SpotSide
    row: int
    nominal: InS
    corners: InS
    at: NDArray[np.intp]
    ends: int
    figures: FloatArray

    def some(self, which: NDArray[np.bool_]) -> _Pairs:
        """Some of the pairs."""
        return replace(self, at=self.at[which], figures=self.figures[:, which])

    def errors(self, hertz: FloatArray, which: NDArray[np.intp]) -> FloatArray:
        """The errors of some of the pairs at frequencies [Hz]."""
        ideal, of = self.nominal.at(np.zeros_like(which), hertz).gain_ideal, self.corners.at(self.at[which], hertz)
        target = self.stages.box.targets[self.row]
        scale = 1.0 if np.isnan(target) else abs(target) / magnitude_of(ideal)
        reference = times(ideal, np.asarray(scale))
        error = over(of.gain_ideal - reference, reference)
        nothing = np.zeros((0, 1, 1), np.complex128)
        here = Meeting(np.zeros((1, 1)), error[None], rises(of, error)[:, None], nothing, of.loadings[:, None], nothing)
        departing = Departing(self.form, self.figures[:, which], hertz[None])
        found, _ = errors(self.form, here, departing, self.ends)
        return np.broadcast_to(found[0], hertz.shape)


def refine(form: Form, stages: SpotSide, parts: PartSide, found: Outcome) -> None:
    """Take the pairs of stages with a band from the points with the largest errors to the largest errors.

    The search is made at each corner that the point visits and that is not far better there than the worst: their
    largest errors lie at frequencies of their own.
    """
    assert found.hertz is not None
    for row in rows(stages):
        point, at_point = found.hertz[row].copy(), np.abs(found.error_worst[row])
        first = stages.first[stages.begin[row]]
        end = np.append(stages.first, stages.corner_values.shape[1])[np.flatnonzero(stages.stage == row)[-1] + 1]
        nominal = coefficients.in_s(form, stages.box.values[:, row, None])
        corners = coefficients.in_s(form, stages.corner_values[:, first:end])
        for columns, at, codes, ends in _corners_of(stages, row, point, found.corner[row]):
            pairs = _Pairs(form, stages, row, nominal, corners, at - first, ends, parts.worst[:, columns])
            everything = np.arange(len(at))
            worth = np.abs(pairs.errors(point[columns], everything)) >= WORTH * at_point[columns]
            if not worth.any():
                continue
            pairs, columns, codes = pairs.some(worth), columns[worth], codes[worth]
            best = _largest(pairs, point[columns])
            error = pairs.errors(best, np.arange(len(best)))
            # Of a pair that stands here more than once the last is kept, the one with the largest error.
            order = np.argsort(np.abs(error), kind="stable")
            order = order[np.abs(error[order]) > np.abs(found.error_worst[row, columns[order]])]
            for whole, values in ((found.hertz, best), (found.error_worst, error), (found.corner, codes)):
                whole[row, columns[order]] = values[order]
        bounded = np.flatnonzero(found.corner[row] != UNBOUNDED)
        for left in range(0, len(bounded), PAIRS_AT_A_TIME):
            columns = bounded[left : left + PAIRS_AT_A_TIME]
            hertz = found.hertz[row, columns]
            departing = Departing(form, parts.nominal[:, columns], hertz[None])
            of_nominal, _ = errors(form, meeting(form, stages, row, None, hertz), departing, every(form))
            found.error_nominal[row, columns] = of_nominal[0]


def _corners_of(
    stages: SpotSide, row: int, point: FloatArray, corner: NDArray[np.int32]
) -> Iterator[tuple[NDArray[np.intp], NDArray[np.intp], NDArray[np.int32], int]]:
    """The parts at every corner that their points visit: as in `Corners`, with the corners' codes."""
    spots = stages.begin[row] + np.searchsorted(stages.hertz_of(row), point)
    for plan in stages.plans:
        here = np.flatnonzero(np.isin(spots, plan.stages) & (corner != UNBOUNDED))
        for q in dict.fromkeys(q for _, q in plan.corners):
            own = np.array([j for j, of_part in plan.corners if of_part == q])
            columns, j = np.repeat(here, len(own)), np.tile(own, len(here))
            codes = stages.codes_of(spots[columns]) + (j * len(stages.part_corners) + q).astype(np.int32)
            for left in range(0, len(columns), PAIRS_AT_A_TIME):
                some = slice(left, left + PAIRS_AT_A_TIME)
                at = stages.first[spots[columns[some]]] + j[some]
                yield columns[some], at, codes[some], stages.part_corners[q]


def _largest(pairs: _Pairs, point: FloatArray) -> FloatArray:
    """The frequency near a point of the band at which the error of each pair is the largest [Hz]."""
    points, which = pairs.stages.hertz_of(pairs.row), np.arange(len(point))
    place = np.searchsorted(points, point)
    low, high = points[np.maximum(place - 1, 0)], points[np.minimum(place + 1, len(points) - 1)]
    inside = point * np.where(low == point, 1.0 + STEP, 1.0 - STEP)
    falls = np.abs(pairs.errors(inside, which)) <= np.abs(pairs.errors(point, which))
    searched = np.flatnonzero(((low < point) & (point < high)) | ~falls)
    best = point.copy()
    if len(searched):
        best[searched] = _golden(lambda at: np.abs(pairs.errors(at, searched)), low[searched], high[searched])
    return best


def _golden(size: Callable[[FloatArray], FloatArray], low: FloatArray, high: FloatArray) -> FloatArray:
    """Where a function with one maximum in each interval is the largest, by golden sections."""
    left, right = high - SECTION * (high - low), low + SECTION * (high - low)
    at_left, at_right = size(left), size(right)
    for _ in range(SECTIONS):
        is_left = at_left > at_right
        low, high = np.where(is_left, low, left), np.where(is_left, right, high)
        new = np.where(is_left, high - SECTION * (high - low), low + SECTION * (high - low))
        at_new = size(new)
        left, right = np.where(is_left, new, right), np.where(is_left, left, new)
        at_left, at_right = np.where(is_left, at_new, at_right), np.where(is_left, at_left, at_new)
    return np.where(at_left > at_right, left, right)
