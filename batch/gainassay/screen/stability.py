"""How far each pair is from oscillation: crossover frequency, phase margin and gain margin of its loops.

The return ratio of an amplifier, all others at work, follows from the form's own denominator. An amplifier's 1/A_OL
enters it to the first power, 1 + sum_k d_k m_k = D_0 + a D_1, so that

    T(s) = D_0 / (a D_1),    s = j 2 pi f,    a(s) = 1/A(jf) = (1/A_OL + j f/GBW) (1 + j f/f_2),

with elements and part at their nominal figures. Here is worked with 1/T, which is finite wherever the form is. Where
its magnitude passes 1, or it passes the negative real axis, is found between two points of a fixed grid of frequencies
and then to a relative 1e-9 and better; a pair of crossings closer together than the grid's points is missed.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import reduce

import numpy as np
from numpy.typing import NDArray

from gainassay.forms import coefficients
from gainassay.forms.coefficients import AnyArray, ComplexArray, FloatArray
from gainassay.forms.departures import DEPARTURES, FIGURES, OPEN_LOOP_GAIN, RISING
from gainassay.forms.form import Form
from gainassay.screen.corners import products
from gainassay.screen.monte_carlo import some

PER_DECADE = 10
GRID = np.array([10.0 ** (step / PER_DECADE) for step in range(-3 * PER_DECADE, 11 * PER_DECADE + 1)])
"""Frequencies between which crossings are looked for [Hz]: from 1 mHz to 100 GHz. Part of the output format."""

STAGES_PER_BLOCK, PARTS_PER_BLOCK = 128, 256
"""Looked at together: few enough for the cache; no bit depends on it."""

CLOSE = 1e-12
"""A crossing is found when the logarithm of its frequency moves by no more than this."""

MOST_STEPS = 100

CHECKED, NO_BANDWIDTH, NO_SECOND_POLE, OUT_OF_REACH = range(4)
"""Whether a margin is known: all is; the gain-bandwidth product is missing; the second pole is missing and was left
out; the loop gain is above 1 at the end of the grid or nowhere defined."""


@dataclass(frozen=True)
class Dynamics:
    """Parts over frequency, at their nominal figures.

    Attributes
    ----------
    nominal : ndarray, shape (figures, parts)
        In the order of `FIGURES`; of the gain-bandwidth product `gbw` is taken.
    gbw : ndarray, shape (parts,)
        Gain-bandwidth product [Hz]; nan where it is not known.
    second_pole : ndarray, shape (parts,)
        Frequency of the second pole [Hz]; nan where it is not known, inf where it is not modelled.
    """

    nominal: FloatArray
    gbw: FloatArray
    second_pole: FloatArray

    def part(self, parts: slice | NDArray[np.intp]) -> Dynamics:
        """Some of the parts."""
        return Dynamics(self.nominal[:, parts], self.gbw[parts], self.second_pole[parts])

    def at(self, hertz: FloatArray) -> ComplexArray:
        """The departures at some frequencies; shape (departures, ...), `hertz` being broadcast against the parts."""
        shape = np.broadcast_shapes(hertz.shape, self.gbw.shape)
        found = np.empty((len(DEPARTURES), *shape), complex)
        pole = np.where(np.isnan(self.second_pole), np.inf, self.second_pole)
        for place, departure in enumerate(DEPARTURES):
            found[place] = self.nominal[place]
            if departure is OPEN_LOOP_GAIN:
                found[place] = (found[place] + 1j * (hertz / self.gbw)) * (1.0 + 1j * (hertz / pole))
            elif departure.symbols[0] in RISING:
                found[place] += 1j * (hertz * self.nominal[FIGURES.index(RISING[departure.symbols[0]])])
        return found


@dataclass(frozen=True)
class Looked:
    """Stages and parts of one form whose loops are looked at.

    Attributes
    ----------
    values : ndarray, shape (elements, stages)
        Nominal values [ohm, F, H].
    """

    form: Form
    values: FloatArray
    parts: Dynamics


@dataclass(frozen=True)
class Margins:
    """What is found for each pair. All arrays have shape (stages, parts).

    Attributes
    ----------
    crossover_hz : ndarray
        Where the loop gain's magnitude passes 1 [Hz]; of several such frequencies, and of several amplifiers, the one
        with the smallest phase margin. nan: there is none, or it is not known.
    phase_margin_deg : ndarray
        The loop gain's phase there, above -180 degrees; below 0 is unstable. inf: there is no crossover, since the
        loop gain stays below 1; nan: it is not known.
    gain_margin_db : ndarray
        How far the same loop gain lies below 1 where its phase passes -180 degrees; of several such frequencies, the
        one closest to 1. inf: the phase stays above; nan: it is not known.
    doubt : ndarray of uint8
        `CHECKED`, or what is missing.
    """

    crossover_hz: FloatArray
    phase_margin_deg: FloatArray
    gain_margin_db: FloatArray
    doubt: NDArray[np.uint8]


def amplifiers(form: Form) -> tuple[str, ...]:
    """The amplifiers of a form, each of which has a loop."""
    inside = {departure for monomial in form.monomials for departure in monomial}
    is_loop = [symbol in OPEN_LOOP_GAIN.symbols and i in inside for i, (_, symbol) in enumerate(form.departures)]
    return tuple(amplifier for (amplifier, _), loop in zip(form.departures, is_loop, strict=True) if loop)


def margins(looked: Looked, wanted: NDArray[np.bool_] | None = None) -> Margins:
    """The margins of all pairs: of the amplifier with the smallest phase margin where there are several.

    Parameters
    ----------
    wanted : ndarray of bool, shape (stages, parts), optional
        Which pairs to look at; all if not given.
    """
    first, *others = (margins_of(looked, name, wanted) for name in amplifiers(looked.form))
    return reduce(_less_stable, others, first)


def _less_stable(one: Margins, other: Margins) -> Margins:
    """Of each pair the margins of the amplifier with the smaller phase margin; not known unless both are."""
    unknown = np.isnan(one.phase_margin_deg) | np.isnan(other.phase_margin_deg)
    is_other = other.phase_margin_deg < one.phase_margin_deg

    def chosen(ours: FloatArray, theirs: FloatArray) -> FloatArray:
        return np.where(unknown, np.nan, np.where(is_other, theirs, ours))

    return Margins(
        chosen(one.crossover_hz, other.crossover_hz),
        chosen(one.phase_margin_deg, other.phase_margin_deg),
        chosen(one.gain_margin_db, other.gain_margin_db),
        np.maximum(one.doubt, other.doubt),
    )


def margins_of(looked: Looked, amplifier: str, wanted: NDArray[np.bool_] | None = None) -> Margins:
    """The margins of one amplifier's loop, all other loops being closed."""
    shape = (looked.values.shape[1], len(looked.parts.gbw))
    known = ~np.isnan(looked.parts.gbw)
    wanted = np.broadcast_to(known, shape) if wanted is None else wanted & known
    found = Margins(np.full(shape, np.nan), np.full(shape, np.nan), np.full(shape, np.nan), np.zeros(shape, np.uint8))
    for rows in some(np.logical_or.reduce(wanted, axis=1), STAGES_PER_BLOCK):
        loop = _Loop.of(looked, amplifier, rows)
        for columns in some(np.logical_or.reduce(wanted[rows], axis=0), PARTS_PER_BLOCK):
            block = np.ix_(rows, columns)
            of_block = _of_block(loop, looked.parts.part(columns), wanted[block])
            for name, values in vars(of_block).items():
                getattr(found, name)[block] = values
    found.doubt[:, np.isnan(looked.parts.second_pole)] |= NO_SECOND_POLE
    found.doubt[np.isnan(found.phase_margin_deg)] = OUT_OF_REACH
    found.doubt[:, ~known] = NO_BANDWIDTH
    return found


def inverse_loop_gain(form: Form, amplifier: str, loadings: ComplexArray, of_part: ComplexArray) -> ComplexArray:
    """1/T of an amplifier from the loadings d_k and the products m_k, broadcast against each other behind axis k."""
    place = form.departures.index((amplifier, *OPEN_LOOP_GAIN.symbols))
    is_own = [place in monomial for monomial in form.monomials]
    own = _total(loadings[is_own], of_part[is_own])
    return own if all(is_own) else own / (1.0 + _total(loadings[np.invert(is_own)], of_part[np.invert(is_own)]))


def _total(factors: AnyArray, of_part: AnyArray) -> ComplexArray:
    """sum_k factors[k] of_part[k], in the order of k."""
    total: ComplexArray = factors[0] * of_part[0]
    for factor, product in zip(factors[1:], of_part[1:], strict=True):
        total += factor * product
    return total


@dataclass(frozen=True)
class _Loop:
    """An amplifier's loop in some stages.

    Attributes
    ----------
    on_grid : ndarray, shape (terms, frequencies, stages)
        The loadings d_k; at one frequency for all if no element is reactive.
    """

    form: Form
    amplifier: str
    values: FloatArray
    on_grid: ComplexArray

    @staticmethod
    def of(looked: Looked, amplifier: str, rows: NDArray[np.intp]) -> _Loop:
        values = looked.values[:, rows]
        is_reactive = any(kind != "resistor" for kind in looked.form.kinds)
        on_grid = loadings_at(looked.form, values, GRID if is_reactive else GRID[:1])
        return _Loop(looked.form, amplifier, values, on_grid)

    def inverse(self, parts: Dynamics, place: int) -> ComplexArray:
        """1/T of all pairs at a frequency of the grid."""
        of_part = products(self.form, parts.at(GRID[place : place + 1]))
        return inverse_loop_gain(
            self.form,
            self.amplifier,
            self.on_grid[:, min(place, self.on_grid.shape[1] - 1), :, None],
            of_part[:, None, :],
        )

    def inverse_of(self, parts: Dynamics, rows: NDArray[np.intp], hertz: FloatArray) -> ComplexArray:
        """1/T of some pairs, a stage, a part and a frequency for each."""
        of_part = products(self.form, parts.at(hertz))
        if self.on_grid.shape[1] == 1:
            return inverse_loop_gain(self.form, self.amplifier, self.on_grid[:, 0, rows], of_part)
        pairs = coefficients.at_frequency(self.form, self.values[:, rows], hertz)
        return inverse_loop_gain(self.form, self.amplifier, coefficients.loadings(self.form, pairs), of_part)


def loadings_at(form: Form, values: FloatArray, hertz: FloatArray) -> ComplexArray:
    """The loadings d_k of some stages at some frequencies; shape (terms, frequencies, stages)."""
    stages = values.shape[1]
    pairs = coefficients.at_frequency(form, np.tile(values, len(hertz)), np.repeat(hertz, stages))
    found: ComplexArray = coefficients.loadings(form, pairs)
    return found.reshape(len(form.monomials), len(hertz), stages)


@dataclass(frozen=True)
class _Crossings:
    """Pairs and the points of the grid behind which each crosses something; a pair may cross several times.

    Attributes
    ----------
    row, column : ndarray of int, shape (crossings,)
    place : ndarray of int
        Of the last point of the grid before it.
    turns : ndarray of int
        How often the phase had passed -180 degrees there, downwards less upwards.
    """

    row: NDArray[np.intp]
    column: NDArray[np.intp]
    place: NDArray[np.intp]
    turns: NDArray[np.intp]

    @staticmethod
    def of(found: Sequence[tuple[NDArray[np.intp], ...]]) -> _Crossings:
        """All that was found, point by point."""
        return _Crossings(*(np.concatenate(parts) for parts in zip(*found, strict=True)))


def _of_block(loop: _Loop, parts: Dynamics, wanted: NDArray[np.bool_]) -> Margins:
    """The margins of all stages of a loop with some parts; `doubt` says nothing yet."""
    gain, phase, beyond = _scan(loop, parts, wanted)
    crossover, margin = np.full(wanted.shape, np.nan), np.full(wanted.shape, np.inf)
    hertz = _refined(loop, parts, gain, _log_size)
    degrees = _phase_margins(loop, parts, gain, hertz)
    # Of repeated places the last one assigned stays.
    order = np.argsort(-degrees, kind="stable")
    at = gain.row[order], gain.column[order]
    crossover[at], margin[at] = hertz[order], degrees[order]

    gain_margin = np.full(wanted.shape, np.inf)
    turning = _refined(loop, parts, phase, _sine)
    size = loop.inverse_of(parts.part(phase.column), phase.row, turning)
    decibel = 20.0 * np.log10(np.abs(size))
    order = np.argsort(-np.abs(decibel), kind="stable")
    gain_margin[phase.row[order], phase.column[order]] = decibel[order]
    for figures in (crossover, margin, gain_margin):
        figures[beyond | ~wanted] = np.nan
    return Margins(crossover, margin, gain_margin, np.zeros(wanted.shape, np.uint8))


def _scan(loop: _Loop, parts: Dynamics, wanted: NDArray[np.bool_]) -> tuple[_Crossings, _Crossings, NDArray[np.bool_]]:
    """Where |T| passes 1, where T passes the negative real axis, and which pairs never come to an end on the grid."""
    before = loop.inverse(parts, 0)
    was_above, lagged = _is_above(before), before.imag > 0.0
    sound, turns = np.isfinite(before), np.zeros(wanted.shape, np.intp)
    nothing = np.zeros(wanted.shape, dtype=bool)
    of_gain, of_phase = ([_noted(nothing, 0, turns)] for _ in range(2))
    for place in range(len(GRID) - 1):
        after = loop.inverse(parts, place + 1)
        is_above, lags = _is_above(after), after.imag > 0.0
        sound &= np.isfinite(after)
        crosses, passes = wanted & (was_above != is_above), wanted & (lagged != lags)
        if crosses.any():
            of_gain.append(_noted(crosses, place, turns))
        if passes.any():
            # Where the chord between both points meets the real axis.
            passes &= (before.real * after.imag < after.real * before.imag) != lagged
            of_phase.append(_noted(passes, place, turns))
            turns = turns + passes * np.where(lagged, 1, -1)
        before, was_above, lagged = after, is_above, lags
    return _Crossings.of(of_gain), _Crossings.of(of_phase), ~sound | was_above


def _is_above(inverse: ComplexArray) -> NDArray[np.bool_]:
    """Whether |T| is 1 or more."""
    return np.asarray(inverse.real**2 + inverse.imag**2 <= 1.0)


def _noted(crossing: NDArray[np.bool_], place: int, turns: NDArray[np.intp]) -> tuple[NDArray[np.intp], ...]:
    rows, columns = np.nonzero(crossing)
    return rows, columns, np.full(len(rows), place), turns[rows, columns]


def _log_size(inverse: ComplexArray) -> FloatArray:
    return np.log(np.abs(inverse))


def _sine(inverse: ComplexArray) -> FloatArray:
    return np.asarray(inverse.imag / np.abs(inverse))


def _refined(loop: _Loop, parts: Dynamics, at: _Crossings, of: Callable[[ComplexArray], FloatArray]) -> FloatArray:
    """The frequencies of crossings, each a change of sign of a function of 1/T."""

    def function(which: NDArray[np.intp], log_hertz: FloatArray) -> FloatArray:
        return of(loop.inverse_of(parts.part(at.column[which]), at.row[which], np.exp(log_hertz)))

    ends = (np.log(GRID[at.place]), np.log(GRID[at.place + 1]))
    return np.exp(roots(function, *ends))


def roots(
    function: Callable[[NDArray[np.intp], FloatArray], FloatArray], low: FloatArray, high: FloatArray
) -> FloatArray:
    """Where functions change their sign between two ends: false position, the end that stays being halved (Illinois).

    Each case ends for itself, so that no bit depends on the others.

    Parameters
    ----------
    function : callable
        Values of some of the functions, given their places and an argument for each.
    low, high : ndarray, shape (cases,)
    """
    every = np.arange(len(low))
    kept, newest = low.copy(), high.copy()
    of_kept, of_newest = function(every, kept), function(every, newest)
    left = every
    for _ in range(MOST_STEPS):
        left = left[of_newest[left] != 0.0]
        if not len(left):
            break
        (a, b), (of_a, of_b) = (kept[left], newest[left]), (of_kept[left], of_newest[left])
        found = b - of_b * (b - a) / (of_b - of_a)
        of_found = function(left, found)
        is_between = np.sign(of_found) != np.sign(of_b)
        kept[left], of_kept[left] = np.where(is_between, b, a), np.where(is_between, of_b, of_a / 2.0)
        newest[left], of_newest[left] = found, of_found
        left = left[np.abs(found - b) > CLOSE]
    return newest


def _phase_margins(loop: _Loop, parts: Dynamics, at: _Crossings, hertz: FloatArray) -> FloatArray:
    """Phase of T at crossovers, above -180 degrees, followed from the grid's first point on."""
    own = parts.part(at.column)
    before = loop.inverse_of(own, at.row, GRID[at.place])
    change = np.angle(before / loop.inverse_of(own, at.row, hertz))
    return np.asarray(180.0 - 360.0 * at.turns + np.degrees(change - np.angle(before)))


def response(looked: Looked, hertz: FloatArray) -> tuple[ComplexArray, dict[str, ComplexArray]]:
    """Gain [gain unit], and T of each amplifier, of the first stage with the first part; shape (frequencies,)."""
    form, values = looked.form, np.repeat(looked.values[:, :1], len(hertz), axis=1)
    at = coefficients.evaluate(form, coefficients.at_frequency(form, values, hertz))
    of_part = products(form, looked.parts.part(slice(0, 1)).at(hertz))
    error = _total(at.contrasts, of_part) / (1.0 + _total(at.loadings, of_part))
    loops = {name: 1.0 / inverse_loop_gain(form, name, at.loadings, of_part) for name in amplifiers(form)}
    return at.gain_ideal * (1.0 + error), loops
