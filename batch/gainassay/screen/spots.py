"""Stages at their frequencies, each such pair a *spot*, and the corners that they visit there.

A gain's magnitude is no ratio of multi-affine functions, so that corners are an estimate of its worst case. They follow
from the slopes of ln(gain), whose real part moves the magnitude and whose imaginary part the phase: where a
slope has one sign wherever it is looked at, or next to no weight, one end of the variable is visited for the largest
and the other for the smallest, else both for either.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from gainassay.forms import coefficients
from gainassay.forms.coefficients import AnyArray, Coefficients, ComplexArray, FloatArray, Slopes, over, times
from gainassay.forms.form import Form
from gainassay.screen.boxes import StageBox, product
from gainassay.screen.corners import elements_terms
from gainassay.screen.response import Meeting, figures, figures_of, mattering, products, variables
from gainassay.screen.signs import FALLS, FIXED, OPEN, RISES
from gainassay.screen.visits import Factors, Plan, bits, factors_at, visit, with_a_bound

SHARE = 0.03
"""Of the poorest figures of the parts table: those of a good part, with which slopes are looked at, too."""

POINTS_PER_DECADE = 32
"""Of a band, before the largest error is searched for between points."""

NEGLIGIBLE = 2e-3
"""A variable that moves the gain by no larger share of what all do together is taken one way only."""

MOST_OPEN = 6
"""Variables of a spot that are taken both ways at most, those that move the gain most."""


@dataclass(frozen=True)
class SpotSide:
    """What the kernel needs of some stages of one topology at their frequencies.

    Attributes
    ----------
    box : StageBox
        Of the stages.
    gain_ideal, reference, limits, phase_limits : ndarray, shape (stages,)
        Magnitude of the ideal gain at the stage's first frequency and of the gain that errors refer to there
        [gain unit]; required accuracy as a fraction; largest phase error [degree].
    matters : ndarray of bool, shape (figures, stages)
        Whether a figure of the part matters.
    begin : ndarray of int, shape (stages,)
        The first of each stage's spots; the spots of all stages stand in a row.
    stage : ndarray of int, shape (spots,)
    hertz, set_point : ndarray, shape (spots,)
        Of each spot: frequency [Hz], and (gain_ideal - reference)/reference.
    nominal : Coefficients
        G_ideal, n_k - d_k and d_k at the nominal values; shape (..., spots).
    first : ndarray of int, shape (spots,)
        Where the corners of each spot begin on the axis of corners.
    corner_values : ndarray, shape (elements, corners)
    corner_error : ndarray of complex, shape (corners,)
        (ideal gain at the corner - reference)/reference; the reference has the phase of the nominal ideal gain.
    corner_contrasts, corner_loadings : ndarray of complex, shape (terms, corners)
    corner_rises, nominal_rises : ndarray of complex, shape (terms, corners) and (terms, spots)
        (1 + e)(n_k - d_k) + e d_k, e being the error of the ideal gain.
    corner_terms : ndarray of complex, shape (moves x elements + 1, corners)
        As in `corners.StageSide`, each with its phase.
    factors : Factors
        On the nominal values at the corners.
    part_corners : tuple[int, ...]
        The corners of a part: bit i says whether variable i is at its limit.
    plans : tuple[Plan, ...]
        Which corners to visit; every spot is in one of them, and a corner of the part is a place in `part_corners`.
    """

    box: StageBox
    gain_ideal: FloatArray
    reference: FloatArray
    limits: FloatArray
    phase_limits: FloatArray
    matters: NDArray[np.bool_]
    begin: NDArray[np.intp]
    stage: NDArray[np.intp]
    hertz: FloatArray
    set_point: FloatArray
    nominal: Coefficients
    first: NDArray[np.intp]
    corner_values: FloatArray
    corner_error: ComplexArray
    corner_contrasts: ComplexArray
    corner_loadings: ComplexArray
    corner_rises: ComplexArray
    nominal_rises: ComplexArray
    corner_terms: ComplexArray
    factors: Factors
    part_corners: tuple[int, ...]
    plans: tuple[Plan, ...]

    @property
    def is_band(self) -> NDArray[np.bool_]:
        """Which stages have a band; shape (stages,)."""
        if self.box.signals is None:
            raise ValueError("these stages work at 0 Hz")
        return self.box.signals.is_band

    def hertz_of(self, row: int) -> FloatArray:
        """The frequencies of a stage's spots [Hz]."""
        return np.asarray(self.hertz[self.stage == row])

    def at(self, spots: NDArray[np.intp], j: int) -> Meeting:
        """A corner of some spots, where they meet parts."""
        at = self.first[spots] + j
        return Meeting(
            self.set_point[spots, None],
            self.corner_error[at, None],
            self.corner_rises[:, at, None],
            self.corner_contrasts[:, at, None],
            self.corner_loadings[:, at, None],
            self.corner_terms[:, at, None],
        )

    def nominally(self, spots: NDArray[np.intp]) -> Meeting:
        """Some spots with nominal values, where they meet parts."""
        set_point = self.set_point[spots, None]
        return Meeting(
            set_point,
            set_point.astype(np.complex128),
            self.nominal_rises[:, spots, None],
            self.nominal.contrasts[:, spots, None],
            self.nominal.loadings[:, spots, None],
            np.zeros((len(self.corner_terms), 1, 1), np.complex128),
        )

    def stages_of(self, plan: Plan) -> NDArray[np.intp]:
        """The stages that a plan is about."""
        return self.stage[plan.stages]

    def codes_of(self, spots: NDArray[np.intp]) -> NDArray[np.int32]:
        """The code of each spot's first corner among all of its stage's."""
        first_of_stage = self.first[self.begin[self.stage[spots]]]
        return ((self.first[spots] - first_of_stage) * len(self.part_corners)).astype(np.int32)


def spots_of(form: Form, box: StageBox) -> tuple[NDArray[np.intp], FloatArray]:
    """The stage and the frequency [Hz] of each spot, ordered by both.

    Of a band both ends, points between them and the natural frequencies of the ideal gain, where a sharp resonance may
    hide between points.
    """
    signals = box.signals
    if signals is None:
        raise ValueError("these stages work at 0 Hz")
    each = []
    for stage, (is_band, hertz) in enumerate(zip(signals.is_band.tolist(), signals.hertz.T, strict=True)):
        if is_band:
            low, high = hertz[:2].tolist()
            points = 1 + int(np.ceil(POINTS_PER_DECADE * np.log10(high / low)))
            natural = coefficients.natural_frequencies(form, box.values[:, stage])
            inside = natural[(natural > low) & (natural < high)]
            each.append(np.unique(np.concatenate([[low, high], np.geomspace(low, high, points)[1:-1], inside])))
        else:
            each.append(hertz[~np.isnan(hertz)])
    return np.repeat(np.arange(len(each)), [len(hertz) for hertz in each]), np.concatenate(each)


def stage_side(form: Form, box: StageBox, farthest: FloatArray) -> SpotSide:
    """Evaluate a form's coefficient functions at the spots of some stages, nominally and at the corners to visit.

    Parameters
    ----------
    farthest : ndarray, shape (figures,)
        The largest of each of `FIGURES` over the whole parts table.
    """
    signals = box.signals
    if signals is None:
        raise ValueError("these stages work at 0 Hz")
    of_stage, hertz = spots_of(form, box)
    at_spots = box.part(of_stage)
    nominal = coefficients.evaluate(form, coefficients.at_frequency(form, at_spots.values, hertz))
    magnitude = magnitude_of(nominal.gain_ideal)
    references = np.where(np.isnan(at_spots.targets), magnitude, np.abs(at_spots.targets))
    with np.errstate(divide="ignore", invalid="ignore"):
        complex_reference = times(nominal.gain_ideal, references / magnitude)
    known = _directions(form, at_spots, hertz, farthest, np.isfinite(signals.phase_limits)[of_stage])
    visited = visit(form, known, bits, figures(form), len(known[0]) - len(variables(form)))
    spot = visited.stage
    factors = factors_at(at_spots, spot, visited.is_upper)
    values = at_spots.values[:, spot] * product(factors.own) * product(factors.together)
    at = coefficients.evaluate(form, coefficients.at_frequency(form, values, hertz[spot]))

    def ideal(moved: FloatArray) -> ComplexArray:
        return coefficients.gain_ideal(form, coefficients.at_frequency(form, moved, hertz[spot]))

    with np.errstate(divide="ignore", invalid="ignore"):
        error = over(at.gain_ideal - complex_reference[spot], complex_reference[spot])
        sound = np.isfinite(error) & np.isfinite(at.contrasts).all(axis=0) & np.isfinite(at.loadings).all(axis=0)
        set_point = (magnitude - references) / references
    regular = np.logical_and.reduceat(sound, visited.first)
    used = np.logical_or.reduceat((at.contrasts != 0.0) | (at.loadings != 0.0), visited.first, axis=1)
    begin = np.searchsorted(of_stage, np.arange(len(box.limits)))
    masks = sorted({q for plan in visited.plans for _, q in plan.corners})
    return SpotSide(
        box=box,
        gain_ideal=magnitude[begin],
        reference=references[begin],
        limits=box.limits,
        phase_limits=signals.phase_limits,
        matters=mattering(form, np.logical_or.reduceat(used, begin, axis=1)),
        begin=begin,
        stage=of_stage,
        hertz=hertz,
        set_point=set_point,
        nominal=nominal,
        first=visited.first,
        corner_values=values,
        corner_error=error,
        corner_contrasts=at.contrasts,
        corner_loadings=at.loadings,
        corner_rises=rises(at, error),
        nominal_rises=rises(nominal, set_point),
        corner_terms=elements_terms(at_spots.values[:, spot], factors, complex_reference[spot], ideal),
        factors=factors,
        part_corners=tuple(masks),
        plans=with_a_bound(tuple(_numbered(plan, masks) for plan in visited.plans), regular),
    )


def rises(at: Coefficients, error: AnyArray) -> ComplexArray:
    """(1 + e)(n_k - d_k) + e d_k."""
    return np.asarray(times(at.contrasts, 1.0 + error) + times(at.loadings, error))


def magnitude_of(z: ComplexArray) -> FloatArray:
    """|z|, rounded the same wherever a number stands in the array."""
    return np.asarray(np.sqrt(z.real * z.real + z.imag * z.imag))


def _numbered(plan: Plan, masks: Sequence[int]) -> Plan:
    """The plan with places in `masks` as corners of the part."""
    return replace(plan, corners=tuple((j, masks.index(q)) for j, q in plan.corners))


def _directions(
    form: Form, box: StageBox, hertz: FloatArray, farthest: FloatArray, with_phase: NDArray[np.bool_]
) -> NDArray[np.int8]:
    """Which way each variable moves magnitude and phase; shape (2, elements + networks + variables, spots).

    Slopes are looked at with the nominal elements and at both corners of them between which the ideal gain moves most,
    with several parts. Of spots that `with_phase` is not true of, the phase is left out.
    """
    pairs = coefficients.at_frequency(form, box.values, hertz)
    rises_with_value = (_turn(form) * coefficients.slopes_of_ideal(form, pairs).real) > 0.0
    low, high = box.ends()
    values = np.concatenate(
        [
            box.values * factor
            for factor in (1.0, np.where(rises_with_value, low, high), np.where(rises_with_value, high, low))
        ],
        axis=1,
    )
    # All three at once: of few spots the calls take the time.
    three = np.tile(np.arange(len(hertz)), 3)
    looked = _slopes(form, box.part(three), values, hertz[three], farthest)
    magnitude, phase = (_layer(looked, part) for part in (np.real, np.imag))
    return np.array([magnitude, np.where(with_phase, phase, magnitude)])


def _turn(form: Form) -> FloatArray:
    """A capacitance is the inverse of what slopes are in; shape (elements, 1)."""
    return np.where(np.array(form.kinds) == "capacitor", -1.0, 1.0)[:, None]


@dataclass(frozen=True)
class _Looked:
    """Slopes of ln(gain) wherever they were looked at, real and imaginary parts apart; shape (variables, spots).

    Each is times its variable's range, so that it is by how much the variable may move the gain.

    Attributes
    ----------
    least, most : ndarray of complex
        The least and the largest.
    share : ndarray of complex
        The largest share in the sum of magnitudes over all variables.
    """

    least: ComplexArray
    most: ComplexArray
    share: ComplexArray


def _apart(function: Callable[..., FloatArray], *of: ComplexArray) -> ComplexArray:
    """A function of real parts and of imaginary parts."""
    real, imag = function(*(z.real for z in of)), function(*(z.imag for z in of))
    found = np.empty(real.shape, np.complex128)
    found.real, found.imag = real, imag
    return found


def _layer(looked: _Looked, part: Callable[[ComplexArray], FloatArray]) -> NDArray[np.int8]:
    """Directions of magnitude or phase, from the real or the imaginary parts of slopes."""
    low, high, share = part(looked.least), part(looked.most), part(looked.share)
    either_way = (low < 0.0) & (high > 0.0) & (share > NEGLIGIBLE)
    weight = np.sort(np.where(either_way, share, 0.0), axis=0)
    either_way &= share >= weight[-min(MOST_OPEN, len(weight))]
    along = np.where(low + high >= 0.0, np.int8(RISES), np.int8(FALLS))
    still = (looked.least == 0.0) & (looked.most == 0.0)
    return np.where(still, np.int8(FIXED), np.where(either_way, np.int8(OPEN), along))


def _slopes(form: Form, box: StageBox, values: FloatArray, hertz: FloatArray, farthest: FloatArray) -> _Looked:
    """Slopes with ideal parts, with figures as far as they reach, with a share of that, and with each figure alone.

    The spots stand three times in a row, and are looked at as one.
    """
    pairs = coefficients.at_frequency(form, values, hertz)
    at, slope = coefficients.evaluate(form, pairs), coefficients.slopes(form, pairs)
    reach = figures_of(form, farthest)
    of_parts = np.column_stack([np.zeros_like(reach), reach, SHARE * reach, *np.diag(reach)])
    moves = _moves(form, box, hertz, at, slope, of_parts, reach)
    with np.errstate(divide="ignore", invalid="ignore"):
        share = _apart(lambda part: np.nan_to_num(np.abs(part) / np.abs(part).sum(axis=0)), moves)

    def over_all(function: Callable[..., FloatArray], of: ComplexArray) -> ComplexArray:
        each = of.reshape(len(of), of.shape[1], 3, -1)
        return _apart(lambda part: function(part, axis=(1, 2)), each)

    return _Looked(over_all(np.min, moves), over_all(np.max, moves), over_all(np.max, share))


def _moves(
    form: Form,
    box: StageBox,
    hertz: FloatArray,
    at: Coefficients,
    slope: Slopes,
    of_parts: FloatArray,
    reach: FloatArray,
) -> ComplexArray:
    """By how much each element, network and figure moves ln(gain) over its range; shape (variables, parts, spots).

    Parameters
    ----------
    of_parts : ndarray, shape (variables of the part, parts)
        The figures with which slopes are looked at.
    reach : ndarray, shape (variables of the part,)
    """
    m = products(form, of_parts, hertz)
    top, bottom = 1.0 + _total(at.contrasts + at.loadings, m), 1.0 + _total(at.loadings, m)

    def change(contrasts: ComplexArray, loadings: ComplexArray, moved: ComplexArray) -> ComplexArray:
        return over(_total(contrasts + loadings, moved), top) - over(_total(loadings, moved), bottom)

    with np.errstate(all="ignore"):
        of_elements = _turn(form)[..., None] * np.array(
            [
                ideal + change(contrasts, loadings, m)
                for ideal, contrasts, loadings in zip(slope.gain_ideal, slope.contrasts, slope.loadings, strict=True)
            ]
        )
        own, common = (
            (np.log(product(ends.high)) - np.log(product(ends.low)))[:, None] for ends in (box.own, box.common)
        )
        found = list(of_elements * own)
        for place, wide in enumerate(common):
            found.append(np.where((box.network == place)[:, None], of_elements, 0.0).sum(axis=0) * wide)
        for i, most in enumerate(reach):
            moved = of_parts.copy()
            moved[i] += most
            found.append(change(at.contrasts, at.loadings, products(form, moved, hertz) - m))
        moves = np.array(found)
        return np.where(np.isfinite(moves), moves, 0.0)


def _total(of: ComplexArray, m: ComplexArray) -> ComplexArray:
    """sum_k of[k] * m[k], in the order of k; shape (parts, spots) from (terms, spots) and (terms, parts, spots)."""
    total = np.zeros(m.shape[1:], np.complex128)
    for coefficient, product_k in zip(of, m, strict=True):
        total += times(coefficient[None], product_k)
    return total
