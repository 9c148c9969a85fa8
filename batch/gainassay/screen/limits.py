"""Operating limits: whether a stage asks more of a part than it can bear, beside all accuracy.

Every comparison comes down to

    margin = (what the stage leaves) - (what the part takes) >= 0,

one number of the stage and one of the part. What an amplifier must do follows from `forms.duty`: with ideal amplifiers,
nominal elements, and the network as it is at 0 Hz or at the stage's frequencies. Noise gains are those at 0 Hz and far
above all corner frequencies, where capacitors are shorts: the smaller counts. What lies on a limit is inside it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from functools import reduce

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts.limits import LIMITS
from gainassay.contracts.signals import Signals
from gainassay.forms import coefficients
from gainassay.forms.coefficients import FloatArray, Pairs
from gainassay.forms.duty import Duty, Work
from gainassay.forms.form import Form
from gainassay.tables.operating import Operating
from gainassay.tables.spreads import CALIBRATION_C

ROUNDING = 1e-9
"""Share of the numbers compared by which a pair may be off a limit and still lie on it: decimals are rounded."""

PER_US = 1e-6

NONE = -1
"""Stands for the limit of a pair that is outside none."""


@dataclass(frozen=True)
class Conditions:
    """What stages ask of each of their amplifiers; arrays of shape (stages,), nan where nothing is known.

    Attributes
    ----------
    v_out_up, v_out_down : ndarray
        How far any amplifier's output goes up and down from the stage's ground [V].
    i_out : ndarray
        Largest current out of or into any amplifier's output [A].
    v_in_up, v_in_down : ndarray
        How far any amplifier's inputs go up and down from the stage's ground [V].
    noise_gain : ndarray
        Least noise gain of any loop [V/V].
    slew : ndarray
        Largest slope of any amplifier's output [V/us].
    above, below : ndarray
        From the stage's ground to the positive and to the negative end of the supply [V].
    v_supply : ndarray
        Supply in all [V].
    t_min, t_max : ndarray
        Temperatures [degree Celsius].
    """

    v_out_up: FloatArray
    v_out_down: FloatArray
    i_out: FloatArray
    v_in_up: FloatArray
    v_in_down: FloatArray
    noise_gain: FloatArray
    slew: FloatArray
    above: FloatArray
    below: FloatArray
    v_supply: FloatArray
    t_min: FloatArray
    t_max: FloatArray


@dataclass(frozen=True)
class Side:
    """One comparison of a limit.

    Attributes
    ----------
    limit : str
        Name of the limit.
    end : str
        Which end of a range it is; empty for a limit of one side.
    is_upper : bool
        Whether what is asked must not exceed what is allowed; else, not fall short of it.
    asked : callable
        Gives, of the stages, what is compared.
    whole : callable
        Gives, of the stages, what the part takes from: that less what it takes is allowed; for a lower limit, that
        and what it takes.
    taken : callable
        Gives, of the parts, what the part takes; negative: it gives.
    """

    limit: str
    end: str
    is_upper: bool
    asked: Callable[[Conditions], FloatArray]
    whole: Callable[[Conditions], FloatArray]
    taken: Callable[[Operating], FloatArray]

    def left(self, stages: Conditions) -> FloatArray:
        """What the stages leave."""
        return (self.whole(stages) - self.asked(stages)) * (1.0 if self.is_upper else -1.0)


def _full_power(parts: Operating) -> FloatArray:
    return _slope(parts["full_power_hz_min"], parts["v_full_power_peak"])


def _nothing(stages: Conditions) -> FloatArray:
    return np.zeros_like(stages.v_supply)


SIDES = (
    Side("output_swing", "up", True, lambda s: s.v_out_up, lambda s: s.above, lambda p: p["v_swing_headroom_max"]),
    Side("output_swing", "down", True, lambda s: s.v_out_down, lambda s: s.below, lambda p: p["v_swing_headroom_max"]),
    Side("output_current", "", True, lambda s: s.i_out, _nothing, lambda p: -p["i_out_max"]),
    Side("input_range", "up", True, lambda s: s.v_in_up, lambda s: s.above, lambda p: p["v_cm_headroom_high_max"]),
    Side("input_range", "down", True, lambda s: s.v_in_down, lambda s: s.below, lambda p: p["v_cm_headroom_low_max"]),
    Side("slew_rate", "", True, lambda s: s.slew, _nothing, lambda p: -p["slew_rate_v_us_min"]),
    Side("full_power", "", True, lambda s: s.slew, _nothing, lambda p: -_full_power(p)),
    Side("stable_gain", "", False, lambda s: s.noise_gain, _nothing, lambda p: p["gain_stable_min"]),
    Side("supply_range", "least", False, lambda s: s.v_supply, _nothing, lambda p: p["v_supply_min"]),
    Side("supply_range", "most", True, lambda s: s.v_supply, _nothing, lambda p: -p["v_supply_max"]),
    Side("temperature_range", "lowest", False, lambda s: s.t_min, _nothing, lambda p: p["t_part_min_c"]),
    Side("temperature_range", "highest", True, lambda s: s.t_max, _nothing, lambda p: -p["t_part_max_c"]),
)
"""All comparisons, those of a limit one after the other, in the order of `LIMITS`."""

PLACES = tuple([limit.name for limit in LIMITS].index(side.limit) for side in SIDES)
"""Place in `LIMITS` of each side's limit."""


@dataclass(frozen=True)
class Bounds:
    """Stages and parts as the sides compare them; nan where nothing is known.

    Attributes
    ----------
    asked, left, rounding : ndarray, shape (sides, stages)
        What is compared, what the stages leave, and by how much that may be off by rounding.
    taken : ndarray, shape (sides, parts)
        What the parts take of it.
    """

    asked: FloatArray
    left: FloatArray
    rounding: FloatArray
    taken: FloatArray

    def of(self, stages: slice, parts: slice) -> Bounds:
        """Some of the stages with some of the parts."""
        return Bounds(self.asked[:, stages], self.left[:, stages], self.rounding[:, stages], self.taken[:, parts])

    def unknown(self) -> Bounds:
        """The same with nothing known of the parts, so that no limit is checked."""
        return replace(self, taken=np.full_like(self.taken, np.nan))

    def margins(self, side: int) -> FloatArray:
        """Margin of each pair, shape (stages, parts); 0 on the limit, negative outside, nan if not known."""
        margin = self.left[side][:, None] - self.taken[side]
        return np.where(np.abs(margin) <= self.rounding[side][:, None], 0.0, margin)


@dataclass(frozen=True)
class Kept:
    """Which limits the pairs keep: arrays of shape (stages, parts), a bit for each of `LIMITS`.

    Attributes
    ----------
    outside : ndarray of uint8
        The limits that a pair is outside of.
    unchecked : ndarray of uint8
        Those that could not be checked.
    """

    outside: NDArray[np.uint8]
    unchecked: NDArray[np.uint8]

    def first_outside(self) -> NDArray[np.int8]:
        """Place in `LIMITS` of the first that a pair is outside of, else `NONE`."""
        return np.asarray(_FIRST[self.outside])


_FIRST = np.array([(code & -code).bit_length() - 1 for code in range(1 << len(LIMITS))], np.int8)


def holding(place: int) -> NDArray[np.intp]:
    """The codes of `Kept` that hold a limit."""
    return np.flatnonzero(np.arange(1 << len(LIMITS)) >> place & 1)


def named(code: int) -> str:
    """The limits of a code of `Kept`."""
    return ", ".join(limit.name for place, limit in enumerate(LIMITS) if code >> place & 1)


def conditions(
    form: Form, duty: Duty, values: FloatArray, operating: Operating, signals: Signals | None = None
) -> Conditions:
    """What stages of one topology ask.

    Parameters
    ----------
    values : ndarray, shape (elements, stages)
        Nominal values [ohm, F, H], as in `StageGroup`.
    signals : Signals, optional
        Of stages at a frequency; the most that is asked at any of theirs counts.
    """
    at_dc, peak = coefficients.at_dc(form, values), operating["v_out_peak"]
    each = (
        [(at_dc, np.full(values.shape[1], np.nan))]
        if signals is None
        else [(coefficients.at_frequency(form, values, hertz), hertz) for hertz in signals.points()]
    )
    asked = [[np.abs(of) * peak for of in _amounts(duty.of_signal, pairs)] for pairs, _ in each]
    v_out, i_out, v_in = (reduce(np.maximum, of) for of in zip(*asked, strict=True))
    slews = [_slope(hertz, of[0].max(axis=0)) for (_, hertz), of in zip(each, asked, strict=True)]
    bias = np.nan_to_num(operating["v_in_dc"])
    nothing = np.zeros_like(v_out)
    at_rest = (nothing,) * 3 if duty.of_bias is None else (of * bias for of in _amounts(duty.of_bias, at_dc))
    v_out_rest, i_out_rest, v_in_rest = (np.where(bias == 0.0, 0.0, of) for of in at_rest)
    supply, cold, hot = operating["v_supply"], operating["t_min_c"], operating["t_max_c"]
    ground = np.where(np.isnan(operating["v_ground"]), supply / 2.0, operating["v_ground"])
    noise_gains = (_noise_gain(duty, pairs) for pairs in (at_dc, coefficients.far_above(form, values)))
    return Conditions(
        v_out_up=(v_out + v_out_rest).max(axis=0),
        v_out_down=(v_out - v_out_rest).max(axis=0),
        i_out=(i_out + np.abs(i_out_rest)).max(axis=0),
        v_in_up=(v_in + v_in_rest).max(axis=0),
        v_in_down=(v_in - v_in_rest).max(axis=0),
        noise_gain=np.minimum(*noise_gains),
        slew=reduce(np.maximum, slews),
        above=supply - ground,
        below=ground,
        v_supply=supply,
        t_min=np.where(np.isnan(cold), CALIBRATION_C, cold),
        t_max=np.where(np.isnan(hot), CALIBRATION_C, hot),
    )


def _amounts(work: Work, pairs: Pairs) -> tuple[FloatArray, ...]:
    """Output voltage, output current and input voltage, each of shape (amplifiers, stages); nan where undefined."""
    found = (coefficients.ratios(ratios, pairs) for ratios in (work.v_out, work.i_out, work.v_in))
    return tuple(np.where(np.isfinite(values), values, np.nan) for values in found)


def _slope(hertz: FloatArray, peak: FloatArray) -> FloatArray:
    """Steepest slope [V/us] of a sine wave."""
    return 2.0 * np.pi * hertz * peak * PER_US


def _noise_gain(duty: Duty, pairs: Pairs) -> FloatArray:
    """Least noise gain of the loops; inf without feedback, nan where loops interact so that there is no such number."""
    size = len(duty.amplifiers)
    flat = [ratio for row in duty.feedback for ratio in row]
    matrices = coefficients.ratios(flat, pairs).T.reshape(-1, size, size)
    is_known = np.asarray(np.isfinite(matrices).all(axis=(1, 2)))
    loops = np.linalg.eigvals(np.where(is_known[:, None, None], matrices, 0.0))
    is_single = (np.abs(loops.imag) <= ROUNDING * np.abs(loops)).all(axis=1)
    most = np.maximum(loops.real.max(axis=1), 0.0)
    with np.errstate(divide="ignore"):
        return np.where(is_known & is_single, 1.0 / most, np.nan)


def bounds(stages: Conditions, parts: Operating) -> Bounds:
    """Stages and parts as the sides compare them."""
    asked, whole = (np.array([getattr(side, of)(stages) for side in SIDES]) for of in ("asked", "whole"))
    return Bounds(
        asked=asked,
        left=np.array([side.left(stages) for side in SIDES]),
        rounding=np.where(np.isfinite(asked), ROUNDING * (np.abs(asked) + np.abs(whole)), 0.0),
        taken=np.array([side.taken(parts) for side in SIDES]),
    )


def check(of: Bounds) -> Kept:
    """Which limits each pair keeps.

    One is not checked if a number is missing and what is known does not break it.
    """
    shape = (of.left.shape[1], of.taken.shape[1])
    outside, unchecked = np.zeros(shape, np.uint8), np.zeros(shape, np.uint8)
    for place, left, rounding, taken in zip(PLACES, of.left, of.rounding, of.taken, strict=True):
        bit = np.uint8(1 << place)
        unknown_stages, unknown_parts = np.isnan(left), np.isnan(taken)
        if unknown_stages.all() or unknown_parts.all():
            unchecked |= bit
            continue
        is_outside = np.less((left + rounding)[:, None], taken)
        if is_outside.any():
            outside |= is_outside * bit
        if unknown_stages.any() or unknown_parts.any():
            unchecked |= np.logical_or(unknown_stages[:, None], unknown_parts) * bit
    return Kept(outside, unchecked & ~outside)


def margins(of: Bounds) -> Iterator[tuple[str, FloatArray]]:
    """Margin of each limit in turn [its unit], shape (stages, parts); nan where it is not checked."""
    for place, limit in enumerate(LIMITS):
        sides = np.array([of.margins(side) for side, own in enumerate(PLACES) if own == place])
        known = np.fmin.reduce(sides, axis=0)
        # What is broken already stays so, whatever the missing number.
        yield limit.name, np.where(known < 0.0, known, sides.min(axis=0))
