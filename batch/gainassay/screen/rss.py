"""The error of each pair stated as a measurement's uncertainty is: root-sum-square after JCGM 100, the GUM.

Every quantity that moves the gain is taken as independent of all others and rectangular between its ends: each factor
on an element (`boxes.Range`), each factor common to a network, and each departure of each amplifier between 0 and its
limit, one of either sign between both. With every quantity x_i in the middle of its range, and with its half width a_i
(JCGM 100:2008, 4.3.7 and 5.1.2),

    mean = error(x),    u^2 = sum_i (d error/d ln x_i)^2 (a_i/x_i)^2/3.

The derivatives are those of the form, not differences of errors: with g = 1 + e of the ideal gain, C = sum_k c_k m_k,
D = 1 + sum_k d_k m_k and E = C/D,

    d error = g (1 + E) d ln g + g (dC - E dD)/D.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from gainassay.contracts.moves import MOVES
from gainassay.forms import coefficients
from gainassay.forms.coefficients import Coefficients, FloatArray, Slopes
from gainassay.forms.form import Form
from gainassay.screen.boxes import StageBox, of_members, product
from gainassay.screen.corners import by_amplifier, figure_names, monomials
from gainassay.screen.kernel import PAIRS_PER_BLOCK, add_products

COVERAGE_FACTOR = 2.0
"""k: how many standard uncertainties a stated error lies beyond the mean (JCGM 100:2008, 6.2)."""

RECTANGULAR = 1.0 / math.sqrt(3.0)
"""Standard uncertainty of a rectangular quantity over half its width."""

SLOPES_AT_A_TIME = 1_000_000
"""So that the slopes of some stages at a time take some megabytes; no bit depends on it."""


@dataclass(frozen=True)
class Middle:
    """Stages in the middle of their boxes.

    Attributes
    ----------
    error : ndarray, shape (stages,)
        Of the ideal gain there.
    at : Coefficients
    slopes : Slopes
        Of each element, then of each factor common to a network.
    spreads : ndarray, shape (moves, elements + networks, stages)
        Standard uncertainty that each of `MOVES` gives an element or a network, over its middle.
    """

    error: FloatArray
    at: Coefficients
    slopes: Slopes
    spreads: FloatArray


def middle(form: Form, box: StageBox) -> Middle:
    """Stages in the middle of their boxes.

    Parameters
    ----------
    box : StageBox
        At 0 Hz, its targets the gains that errors refer to.
    """
    own, common = ((of.low + of.high) / 2.0 for of in (box.own, box.common))
    values = box.values * product(own) * product(of_members(box.network, common))
    pairs = coefficients.at_dc(form, values)
    at, slopes = coefficients.evaluate(form, pairs), coefficients.slopes(form, pairs)
    low, high = (
        np.concatenate(ends, axis=1) for ends in ((box.own.low, box.common.low), (box.own.high, box.common.high))
    )
    return Middle(
        error=(at.gain_ideal - box.targets) / box.targets,
        at=at,
        slopes=Slopes(*(_with_networks(box, one) for one in (slopes.gain_ideal, slopes.contrasts, slopes.loadings))),
        spreads=(high - low) / (high + low) * RECTANGULAR,
    )


def _with_networks(box: StageBox, slopes: FloatArray) -> FloatArray:
    """Slopes in each element, then in each common factor: the sums of its members'. First axis: elements."""
    found = [*slopes]
    for place in range(box.common.low.shape[1]):
        total = np.zeros(slopes.shape[1:])
        for slope, network in zip(slopes, box.network, strict=True):
            total += np.where(network == place, slope, 0.0)
        found.append(total)
    return np.array(found).reshape(len(found), *slopes.shape[1:])


def error_and_sensitivities(
    form: Form, stages: Middle, products: FloatArray, wanted: Sequence[int]
) -> Iterator[FloatArray]:
    """The error of each pair, then its derivative in the logarithm of each quantity wanted.

    Parameters
    ----------
    products : ndarray, shape (terms, parts)
        The products m_k with every departure in the middle of its range.
    wanted : sequence of int
        Places among elements, networks and the form's figures, in this order. For a figure of either sign, whose
        middle is 0, the derivative is that in its share of its limit.

    Yields
    ------
    ndarray, shape (stages, parts)
    """
    shape = (len(stages.error), products.shape[1])
    numerator, denominator = np.zeros(shape), np.ones(shape)
    contrasts, loadings = stages.at.contrasts[..., None], stages.at.loadings[..., None]
    add_products(contrasts, loadings, products, numerator, denominator)
    gain, correction = 1.0 + stages.error[:, None], numerator / denominator
    lift = gain / denominator
    yield stages.error[:, None] + gain * correction
    of_stage, figures = len(stages.slopes.gain_ideal), form.figures()
    for place in wanted:
        rise, load = np.zeros(shape), np.zeros(shape)
        if place < of_stage:
            slopes = stages.slopes
            add_products(slopes.contrasts[place, ..., None], slopes.loadings[place, ..., None], products, rise, load)
            alone = gain * (1.0 + correction) * slopes.gain_ideal[place, :, None]
        else:
            for direction, departure in zip((1.0, -1.0), figures[place - of_stage], strict=False):
                inside = [k for k, monomial in enumerate(form.monomials) if departure in monomial]
                moved = direction * products[inside]
                add_products(contrasts[inside], loadings[inside], moved, rise, load)
            alone = np.zeros(1)
        yield alone + lift * (rise - correction * load)


def root_sum_square(contributions: Iterable[FloatArray]) -> FloatArray:
    """Combined standard uncertainty of independent contributions, added in their order (JCGM 100:2008, eq. 11a)."""
    total = np.zeros(1)
    for contribution in contributions:
        total = total + contribution * contribution
    return np.asarray(np.sqrt(total))


def estimates(
    form: Form, box: StageBox, limits: FloatArray, block: int = PAIRS_PER_BLOCK
) -> tuple[FloatArray, FloatArray]:
    """Mean and standard uncertainty of the error of all pairs; both of shape (stages, parts).

    Parameters
    ----------
    box : StageBox
        As in `middle`.
    limits : ndarray, shape (departures, parts)
        The departures at their limits, in the order of `DEPARTURES`.
    block : int
        Pairs evaluated at a time; no bit depends on it.
    """
    mean, uncertainty = np.empty((2, len(box.limits), limits.shape[1]))
    products = in_the_middle(form, limits)
    width = min(limits.shape[1], block)
    height = max(1, min(block // width, SLOPES_AT_A_TIME // (len(form.elements) * max(1, len(form.monomials)))))
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        for top in range(0, len(box.limits), height):
            rows = slice(top, top + height)
            stages = middle(form, box.part(rows))
            for left in range(0, limits.shape[1], width):
                columns = slice(left, left + width)
                mean[rows, columns], uncertainty[rows, columns] = _estimate(form, stages, products[:, columns])
    return mean, uncertainty


def in_the_middle(form: Form, limits: FloatArray) -> FloatArray:
    """The products m_k with every departure half way to its limit; shape (terms, parts)."""
    return monomials(form, by_amplifier(form, limits / 2.0))


def _estimate(form: Form, stages: Middle, products: FloatArray) -> tuple[FloatArray, FloatArray]:
    spreads = root_sum_square(stages.spreads)[:, :, None]
    # One that moves in none of these stages would add 0.
    moving = [place for place, spread in enumerate(spreads) if spread.any()]
    figures = range(len(spreads), len(spreads) + len(form.figures()))
    found = error_and_sensitivities(form, stages, products, [*moving, *figures])
    mean = next(found)
    factors = [*(spreads[place] for place in moving), *(RECTANGULAR for _ in figures)]
    return mean, root_sum_square(slope * factor for slope, factor in zip(found, factors, strict=True))


@dataclass(frozen=True)
class Entry:
    """A quantity in the uncertainty budget of a pair.

    Attributes
    ----------
    name : str
        Of what moves an element, the joined names of a network's members, or a figure of the part.
    half_width : float
        Of its range, over the middle; 1 where that is 0.
    sensitivity : float
        Derivative of the error in its logarithm, or in its share of its limit where its middle is 0.
    """

    name: str
    half_width: float
    sensitivity: float

    def u(self) -> float:
        """Standard uncertainty of the error that comes from it."""
        return abs(self.sensitivity) * self.half_width * RECTANGULAR


def budget(form: Form, box: StageBox, limits: FloatArray) -> tuple[Entry, ...]:
    """What makes up the uncertainty of one pair; parameters as of `estimates`, for one stage and one part."""
    stages = middle(form, box)
    of_stage = len(form.elements) + box.common.low.shape[1]
    every = range(of_stage + len(form.figures()))
    _, *slopes = (
        float(found[0, 0]) for found in error_and_sensitivities(form, stages, in_the_middle(form, limits), every)
    )
    members = [tuple(np.flatnonzero(box.network[:, 0] == place)) for place in range(box.common.low.shape[1])]
    movers = [*form.elements, *("+".join(form.elements[i] for i in places) for places in members)]
    entries = [
        Entry(f"{mover}.{move}", float(spread) / RECTANGULAR, slope)
        for mover, slope, spreads in zip(movers, slopes[:of_stage], stages.spreads[:, :, 0].T, strict=True)
        for move, spread in zip(MOVES, spreads, strict=True)
    ]
    entries += [Entry(name, 1.0, slope) for name, slope in zip(figure_names(form), slopes[of_stage:], strict=True)]
    return tuple(entry for entry in entries if entry.u())


def probability_inside(mean: float, uncertainty: float, lower: float, upper: float) -> float:
    """Probability that a normally distributed quantity lies between two limits (JCGM 106:2012, 7)."""
    if uncertainty == 0.0:
        return float(lower <= mean <= upper)
    scale = uncertainty * math.sqrt(2.0)
    return 1.0 - (math.erfc((mean - lower) / scale) + math.erfc((upper - mean) / scale)) / 2.0
