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

from gainassay.forms.coefficients import FloatArray
from gainassay.forms.departures import DEPARTURES, OPEN_LOOP_GAIN
from gainassay.forms.form import Form
from gainassay.screen.boxes import StageBox, product
from gainassay.screen.signs import (
    Bounded,
    Reach,
    at_ends,
    bounds,
    bounds_by_product,
    largest_product,
    networks_of,
    stages_at_a_time,
)


@dataclass(frozen=True)
class Slack:
    """Bounds on the slopes of some stages in their networks' common factors, in units that a part's departures fill.

    Attributes
    ----------
    products : tuple[tuple[int, ...], ...]
        Products of departures, each as places in `DEPARTURES`.
    rises, falls : ndarray, shape (networks, products, stages)
        Bounds of the slope upwards and downwards, both not negative, for each product.
    width : ndarray, shape (networks, stages)
        Of the range of the common factor's logarithm.
    """

    products: tuple[tuple[int, ...], ...]
    rises: FloatArray
    falls: FloatArray
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
    return Slack(
        parts[0].products,
        *(np.concatenate([getattr(part, name) for part in parts], axis=-1) for name in ("rises", "falls", "width")),
    )


def _slack(reached: Reach, box: StageBox) -> Slack:
    products = _products(reached.form)
    low, high = at_ends(reached.form, box)
    networks, stages = box.common.low.shape[1:]
    rises, falls = np.zeros((2, networks, len(products), stages))
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        # What N D is at least: the slope of the gain's logarithm is that of N/D times N D.
        least = [_magnitude(*bounds(polynomial, low, high)) for polynomial in (reached.numerator, reached.whole)]
        over = 1.0 / (least[0] * least[1])
        for members, slope in reached.networks.items():
            here = networks_of(box, members)
            if slope is None:
                rises += np.where(here, np.inf, 0.0)[:, None, :]
                falls += np.where(here, np.inf, 0.0)[:, None, :]
            elif here.any():
                for (below, above), place, rest in zip(
                    bounds_by_product(slope, low, high), *_shared(slope, reached, products), strict=True
                ):
                    rises[:, place] += np.where(here, np.maximum(above, 0.0) * rest * over, 0.0)
                    falls[:, place] += np.where(here, np.maximum(-below, 0.0) * rest * over, 0.0)
        width = np.log(product(box.common.high)) - np.log(product(box.common.low))
    row = {departure.symbol: index for index, departure in enumerate(DEPARTURES)}
    kinds = [row[symbol] for _, symbol in reached.form.departures]
    return Slack(tuple(tuple(kinds[i] for i in factors) for factors in products), rises, falls, width)


def _magnitude(least: FloatArray, most: FloatArray) -> FloatArray:
    """The least magnitude between two bounds."""
    return np.asarray(np.where(least > 0.0, least, np.where(most < 0.0, -most, 0.0)))


def _products(form: Form) -> tuple[tuple[int, ...], ...]:
    """Those of two departures of an amplifier, those of 1/A_OL alone, and that of none, in this order."""
    symbols = list(enumerate(form.departures))
    gains = {amplifier: i for i, (amplifier, symbol) in symbols if symbol == OPEN_LOOP_GAIN.symbol}
    pairs = [(gains[amplifier], i) for i, (amplifier, symbol) in symbols if symbol != OPEN_LOOP_GAIN.symbol]
    return (*pairs, *((i,) for i in gains.values()), ())


def _shared(slope: Bounded, reached: Reach, products: Sequence[tuple[int, ...]]) -> tuple[list[int], list[float]]:
    """For each product of departures in a slope: the first of `products` that divides it, and the most that the rest
    comes to over all parts."""
    places, rests = [], []
    for powers in slope.powers:
        place = next(k for k, factors in enumerate(products) if all(powers[i] for i in factors))
        left = powers.copy()
        left[list(products[place])] -= 1
        places.append(place)
        rests.append(largest_product(reached.limits, left))
    return places, rests


def excess(of: Slack, limits: FloatArray) -> FloatArray:
    """By how much the logarithm of a gain may lie beyond its values at the ends, for each pair.

    Parameters
    ----------
    limits : ndarray, shape (departures, parts)
        The departures at their limits, in the order of `DEPARTURES`.

    Returns
    -------
    ndarray, shape (stages, parts)
    """
    total = np.zeros((of.width.shape[1], limits.shape[1]))
    for rises, falls, width in zip(of.rises, of.falls, of.width, strict=True):
        up, down = np.zeros(total.shape), np.zeros(total.shape)
        for factors, rise, fall in zip(of.products, rises, falls, strict=True):
            filled = np.ones(limits.shape[1])
            for departure in factors:
                filled = filled * limits[departure]
            up += rise[:, None] * filled
            down += fall[:, None] * filled
        crosses = (width[:, None] > 0.0) & (up > 0.0) & (down > 0.0)
        total += np.where(crosses, width[:, None] * up * down / np.where(crosses, up + down, 1.0), 0.0)
    return total
