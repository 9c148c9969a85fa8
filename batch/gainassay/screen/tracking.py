"""How far a gain may lie beyond its values at the ends of a network's common factor.

In a factor common to several elements the gain is no ratio of multi-affine functions, and where two effects of the
part oppose each other, such as those of r_id and r_o, its extreme may lie between the ends. With its logarithm's slope
between -f and r over a width w (of the factor's logarithm), no value lies beyond those at both ends by more than
w r f/(r + f). Slopes are bounded as polynomials, in which the ideal gain of ratios cancels exactly; what is left goes
with the part's departures, so the excess is a small share of the error that these make.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from gainassay.forms.coefficients import FloatArray, Pairs
from gainassay.forms.departures import DEPARTURES, PLACE
from gainassay.forms.form import Form
from gainassay.screen.boxes import StageBox, product
from gainassay.screen.signs import (
    Bounded,
    Reach,
    at_ends,
    bounds_by_product,
    networks_of,
    stages_at_a_time,
)

Powers = tuple[int, ...]
"""Exponents of a product of departures, in the order of `DEPARTURES`."""


@dataclass(frozen=True)
class Slack:
    """Bounds on the slopes of some stages in their networks' common factors, to be filled with a part's departures.

    The slope of the gain's logarithm is a polynomial in the departures over N D; bounds are of what stands with each
    product of departures, over the stages' boxes.

    Attributes
    ----------
    powers : tuple[Powers, ...]
        The products in the slopes.
    rises, falls : ndarray, shape (networks, products, stages)
        Bounds of the slope upwards and downwards, both not negative.
    factors : tuple of (tuple[Powers, ...], ndarray of shape (products, stages))
        For N and for D the products and what they take away from the first, that of no departures, at most.
    width : ndarray, shape (networks, stages)
        Of the range of the common factor's logarithm.
    """

    powers: tuple[Powers, ...]
    rises: FloatArray
    falls: FloatArray
    factors: tuple[tuple[tuple[Powers, ...], FloatArray], ...]
    width: FloatArray

    def over(self, width: FloatArray) -> Slack:
        """The same over other ranges of the common factors."""
        return replace(self, width=np.minimum(self.width, width))

    def without(self, stages: NDArray[np.bool_]) -> Slack:
        """The same with nothing for some stages."""
        return replace(self, width=np.where(stages, 0.0, self.width))


def slack(reached: Reach, box: StageBox) -> Slack:
    """The slack of stages over their boxes; infinite where no bound is found."""
    step = stages_at_a_time([slope for slope in reached.networks.values() if slope is not None])
    parts = [_slack(reached, box.part(slice(start, start + step))) for start in range(0, len(box.limits), step)]
    rises, falls, width = (
        np.concatenate([getattr(part, name) for part in parts], axis=-1) for name in ("rises", "falls", "width")
    )
    factors = tuple(
        (powers, np.concatenate([part.factors[place][1] for part in parts], axis=-1))
        for place, (powers, _) in enumerate(parts[0].factors)
    )
    return Slack(parts[0].powers, rises, falls, factors, width)


def _slack(reached: Reach, box: StageBox) -> Slack:
    slopes = {members: slope for members, slope in reached.networks.items() if slope is not None}
    powers = tuple(sorted({power for slope in slopes.values() for power in _powers(reached.form, slope)}))
    low, high = at_ends(reached.form, box)
    # Of a network that `reached` does not know, nothing is known.
    rises = np.where(box.common.moves()[:, None, :], np.full((1, len(powers), 1), np.inf), 0.0)
    falls = rises.copy()
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        for members, slope in slopes.items():
            here = networks_of(box, members)
            rises, falls = (np.where(here[:, None, :], 0.0, bound) for bound in (rises, falls))
            bounded = bounds_by_product(slope, low, high)
            for power, (below, above) in zip(_powers(reached.form, slope), bounded, strict=True):
                place = powers.index(power)
                rises[:, place] += np.where(here, np.maximum(above, 0.0), 0.0)
                falls[:, place] += np.where(here, np.maximum(-below, 0.0), 0.0)
        factors = tuple(
            (tuple(_powers(reached.form, polynomial)), _least(polynomial, low, high))
            for polynomial in (reached.numerator, reached.whole)
        )
        width = np.log(product(box.common.high)) - np.log(product(box.common.low))
    return Slack(powers, rises, falls, factors, width)


def _powers(form: Form, polynomial: Bounded) -> list[Powers]:
    """The exponents of each of its products, those of all amplifiers together."""
    found = np.zeros((len(polynomial.powers), len(DEPARTURES)), np.intp)
    for index, (_, symbol) in enumerate(form.departures):
        found[:, PLACE[symbol]] += polynomial.powers[:, index]
    return [tuple(row) for row in found.tolist()]


def _least(polynomial: Bounded, low: Pairs, high: Pairs) -> FloatArray:
    """The magnitude of what stands with no departures, at least, then what each product takes away from it at most."""
    bounded = list(bounds_by_product(polynomial, low, high))
    (below, above), *others = bounded
    # The ideal gain's own sign: of the products the one without departures stands first.
    sign = np.where(below > 0.0, 1.0, np.where(above < 0.0, -1.0, 0.0))
    first = np.where(sign > 0.0, below, np.where(sign < 0.0, -above, 0.0))
    return np.array([first, *(np.minimum(0.0, np.minimum(sign * b, sign * a)) for b, a in others)])


def excess(of: Slack, limits: FloatArray) -> FloatArray:
    """By how much the logarithm of a gain may lie beyond its values at the ends, for each pair; inf: no bound.

    Parameters
    ----------
    limits : ndarray, shape (departures, parts) or (departures, stages, parts)
        The departures at their limits, in the order of `DEPARTURES`.

    Returns
    -------
    ndarray, shape (stages, parts)
    """
    total = np.zeros((of.width.shape[1], limits.shape[-1]))
    over = np.ones(total.shape)
    for powers, least in of.factors:
        over *= np.maximum(0.0, _filled(powers, least, limits))
    for rises, falls, width in zip(of.rises, of.falls, of.width, strict=True):
        up, down = (_filled(of.powers, slope, limits) for slope in (rises, falls))
        crosses = (width[:, None] > 0.0) & (up > 0.0) & (down > 0.0)
        with np.errstate(divide="ignore", over="ignore"):
            found = width[:, None] * (up * (down / np.where(crosses, up + down, 1.0))) / over
        total += np.where(crosses, found, 0.0)
    return total


def _filled(powers: Sequence[Powers], of: FloatArray, limits: FloatArray) -> FloatArray:
    """The sum of what stands with each product times the product; shape (stages, parts)."""
    total = np.zeros((of.shape[1], limits.shape[-1]))
    for power, values in zip(powers, of, strict=True):
        if values.any():
            filled = np.ones(limits.shape[1:])
            for departure, exponent in enumerate(power):
                for _ in range(exponent):
                    filled = filled * limits[departure]
            total += values[:, None] * filled
    return total
