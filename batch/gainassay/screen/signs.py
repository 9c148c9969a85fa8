"""In which direction each variable moves the gain, proved for each stage over its whole box and the whole parts table.

A proof is a bound: elements lie between the ends of their tolerances, products of departures between 0 and the
largest that any part of the table gives. Where bounds leave a sign open nothing is claimed, and the corners of
that variable are visited.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gainassay.forms import coefficients
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.departures import PLACE
from gainassay.forms.form import Form
from gainassay.forms.slopes import Polynomial, of_common_factor
from gainassay.forms.soundness import sign
from gainassay.screen.boxes import StageBox

ROUNDING = 1e-12
"""Share of a polynomial's magnitudes that bounds its rounding error: thousands of terms of some tens of factors."""

DECADES = 300
"""Decades that the elements of a stage may be away from 1 ohm, all together, and the departures of two products m_k
from 1, together with them: so no term of a slope overflows or underflows, and a bound that comes out as 0 is 0."""

TERMS_AT_A_TIME = 4_000_000
"""So that the terms of a long slope, for some stages at a time, take some megabytes; no bit depends on it."""

RISES, FALLS, OPEN, FIXED = 1, -1, 0, 2
"""The gain as a function of one variable: it does not fall; it does not rise; not known; the variable has one value."""


@dataclass(frozen=True)
class Bounded:
    """A polynomial in elements and departures, laid out for bounding it over boxes.

    Attributes
    ----------
    coefficients : ndarray, shape (terms,)
    exponents : ndarray of int, shape (terms, elements)
    degrees : ndarray of int, shape (elements,)
        To which the polynomial is homogeneous in each element's pair.
    products : tuple
        For each product of departures: its terms, and its least and largest value over the parts.
    powers : ndarray of int, shape (products, departures)
        Its exponents.
    """

    coefficients: FloatArray
    exponents: NDArray[np.intp]
    degrees: NDArray[np.intp]
    products: tuple[tuple[slice, float, float], ...]
    powers: NDArray[np.intp]


@dataclass(frozen=True)
class Remainder:
    """Magnitudes of what a slope that is not whole leaves out: N_1 D_0 and N_0 D_1 without their leading terms.

    Attributes
    ----------
    factors : tuple
        For each of the two products its two factors, each as (terms without departures, all others), with all
        coefficients positive, and N_1 and D_1 divided by the departures that all their terms share.
    """

    factors: tuple[tuple[tuple[Bounded, Bounded], tuple[Bounded, Bounded]], ...]


@dataclass(frozen=True)
class Reach:
    """What the signs of a form's slopes can be proved from, once a parts table says how far departures reach.

    Attributes
    ----------
    form : Form
    limits : ndarray, shape (departures, parts)
        The departures of the form at their limits.
    signs : ndarray of int8, shape (elements + departures,)
        What is known of each slope whatever the values.
    slopes : tuple
        For the others: place among the variables, the polynomial, and what it leaves out.
    networks : Mapping
        For each set of elements that make up a network in some stage, the gain's slope in the logarithm of their
        common factor; None where it is too long to form.
    numerator : Bounded
        N.
    moved : ndarray of bool, shape (departures,)
        Whether any part has the departure at all.
    ideal, whole : Bounded
        N without departures, and D.
    loops : tuple[Bounded, ...]
        The coefficients in D, times that of no departures, that must not be negative; those are left out whose
        sign is known whatever the values.
    decades : float
        Decades that a product m_k has to itself of `DECADES`, at most.
    """

    form: Form
    limits: FloatArray
    signs: NDArray[np.int8]
    slopes: tuple[tuple[int, Bounded, Remainder | None], ...]
    networks: Mapping[tuple[bool, ...], Bounded | None]
    numerator: Bounded
    moved: NDArray[np.bool_]
    ideal: Bounded
    whole: Bounded
    loops: tuple[Bounded, ...]
    decades: float


@dataclass(frozen=True)
class Directions:
    """What is proved of some stages.

    Attributes
    ----------
    of : ndarray of int8, shape (elements + networks + departures, stages)
        `RISES`, `FALLS`, `OPEN` or `FIXED`; elements, and what a network's have in common, by their resistance.
    proved : ndarray of bool, shape (stages,)
        Whether ideal gain and denominator keep their signs, and no loading of a loop is negative, over the box:
        only then do the directions give the worst case.
    """

    of: NDArray[np.int8]
    proved: NDArray[np.bool_]


def reach(form: Form, worst: FloatArray, networks: Iterable[tuple[bool, ...]] = ()) -> Reach:
    """How far the departures of a parts table reach in a form.

    Parameters
    ----------
    worst : ndarray, shape (departures, parts)
        The departures at their limits, in the order of `DEPARTURES`.
    networks : iterable
        The sets of elements that make up a network in some stage.
    """
    limits = worst[[PLACE[symbol] for _, symbol in form.departures]]
    count = len(form.elements)
    loops = {sum(1 << departure for departure in form.monomials[k]): k for k in form.loops()}
    open_loops = [mask for mask, k in loops.items() if form.loadings[k].numerator and not sign(form.loadings[k]) > 0]
    by_product: dict[int, list[tuple[int, tuple[int, ...]]]] = {}
    for value, exponents in form.denominator:
        mask = sum(e << i for i, e in enumerate(exponents[count:]))
        by_product.setdefault(mask, []).append((value, exponents))
    nothing = (0,) * len(form.departures)
    decades = _decades(limits).max(axis=1, initial=0.0).tolist()
    # Ideal gain and denominator are taken as parts of one fraction, homogeneous to the same degrees.
    fraction = [exponents[:count] for _, exponents in (*form.numerator, *form.denominator)]
    degrees = np.array(fraction, np.intp).max(axis=0)
    return Reach(
        form=form,
        limits=limits,
        signs=np.array([slope.sign for slope in form.slopes], np.int8),
        slopes=tuple(
            (index, _bounded(slope.terms, limits, _degrees(slope.terms, count)), None)
            if slope.is_whole
            else (
                index,
                _bounded(slope.terms, limits, 2 * _others(degrees, index)),
                _remainder(form, index, limits, degrees),
            )
            for index, slope in enumerate(form.slopes)
            if slope.terms
        ),
        networks={members: _of_network(form, members, limits, degrees) for members in networks},
        numerator=_bounded(form.numerator, limits, degrees),
        moved=(limits != 0.0).any(axis=1),
        ideal=_bounded([term for term in form.numerator if term[1][count:] == nothing], limits, degrees),
        whole=_bounded(form.denominator, limits, degrees),
        loops=tuple(_bounded(_without_departures(by_product[mask], count), limits, degrees) for mask in open_loops),
        decades=max((sum(decades[i] for i in monomial) for monomial in form.monomials), default=0.0),
    )


def _of_network(form: Form, members: tuple[bool, ...], limits: FloatArray, degrees: NDArray[np.intp]) -> Bounded | None:
    slope = of_common_factor(form.numerator, form.denominator, members)
    return None if slope is None else _bounded(slope, limits, 2 * degrees)


def largest_product(limits: FloatArray, powers: NDArray[np.intp]) -> float:
    """The largest product of powers of departures over the parts.

    By multiplication: pow() may differ between machines and with the place of a part in the table.
    """
    found = np.ones(limits.shape[1])
    for limit, power in zip(limits, powers.tolist(), strict=True):
        for _ in range(power):
            found = found * limit
    return float(found.max())


def _others(degrees: NDArray[np.intp], place: int) -> NDArray[np.intp]:
    """Degrees without that of the variable itself, which is in no factor of its slope."""
    return np.where(np.arange(len(degrees)) == place, 0, degrees)


def _remainder(form: Form, place: int, limits: FloatArray, degrees: NDArray[np.intp]) -> Remainder:
    count = len(form.elements)
    held = [term for term in (*form.numerator, *form.denominator) if term[1][place]]
    shared = [min(column) for column in zip(*(exponents for _, exponents in held), strict=True)]
    # The variable itself, and the departures that stand beside it in every term.
    taken = [share if i == place or i >= count else 0 for i, share in enumerate(shared)]

    def factor(terms: Polynomial, is_held: bool) -> tuple[Bounded, Bounded]:
        sides: tuple[list[tuple[int, tuple[int, ...]]], ...] = ([], [])
        for value, exponents in terms:
            if bool(exponents[place]) == is_held:
                left = tuple(e - t for e, t in zip(exponents, taken, strict=True)) if is_held else exponents
                sides[any(left[count:])].append((abs(value), left))
        ideal, others = (_bounded(side, limits, _others(degrees, place)) for side in sides)
        return ideal, others

    n_0, n_1 = (factor(form.numerator, is_held) for is_held in (False, True))
    d_0, d_1 = (factor(form.denominator, is_held) for is_held in (False, True))
    return Remainder(((n_1, d_0), (n_0, d_1)))


def _without_departures(terms: Polynomial | list[tuple[int, tuple[int, ...]]], elements: int) -> Polynomial:
    return tuple((value, (*exponents[:elements], *(0 for _ in exponents[elements:]))) for value, exponents in terms)


def _degrees(terms: Polynomial, elements: int) -> NDArray[np.intp]:
    return np.asarray(np.array([exponents[:elements] for _, exponents in terms], np.intp).max(axis=0))


def _bounded(terms: Sequence[tuple[int, tuple[int, ...]]], limits: FloatArray, degrees: NDArray[np.intp]) -> Bounded:
    elements = len(degrees)
    ordered = sorted(terms, key=lambda term: (term[1][elements:], term[1]))
    exponents = np.array([powers for _, powers in ordered], np.intp).reshape(len(ordered), elements + len(limits))
    products = []
    start = 0
    for end in range(1, len(ordered) + 1):
        if end == len(ordered) or ordered[end][1][elements:] != ordered[start][1][elements:]:
            powers = exponents[start, elements:]
            largest = largest_product(limits, powers)
            products.append((slice(start, end), 0.0 if powers.any() else 1.0, largest))
            start = end
    return Bounded(
        coefficients=np.array([float(value) for value, _ in ordered]),
        exponents=exponents[:, :elements],
        degrees=degrees,
        products=tuple(products),
        powers=exponents[[terms.start for terms, _, _ in products], elements:],
    )


def stages_at_a_time(polynomials: Sequence[Bounded]) -> int:
    """How many stages to bound polynomials for at a time; no bit depends on it."""
    longest = max((len(polynomial.coefficients) for polynomial in polynomials), default=1)
    return max(1, min(1024, TERMS_AT_A_TIME // max(1, longest)))


def at_ends(form: Form, box: StageBox) -> tuple[coefficients.Pairs, coefficients.Pairs]:
    """The elements at the lower and at the upper ends of their ranges, on one scale so that bounds of terms compare."""
    nominal = coefficients.at_dc(form, box.values)
    low, high = (coefficients.Pairs(nominal.y, nominal.z * factor) for factor in box.ends())
    return low, high


def directions(reached: Reach, box: StageBox) -> Directions:
    """What is proved of some stages."""
    polynomials = [polynomial for _, polynomial, _ in reached.slopes]
    polynomials += [slope for slope in reached.networks.values() if slope is not None]
    step = stages_at_a_time(polynomials)
    blocks = [
        _directions(reached, box.part(slice(start, start + step))) for start in range(0, box.values.shape[1], step)
    ]
    return Directions(
        np.concatenate([block.of for block in blocks], axis=1), np.concatenate([block.proved for block in blocks])
    )


def _directions(reached: Reach, box: StageBox) -> Directions:
    form = reached.form
    count, networks = len(form.elements), box.common.low.shape[1]
    own, common = box.own.moves(), box.common.moves()
    with np.errstate(over="ignore", invalid="ignore", under="ignore"):
        low, high = at_ends(form, box)
        of = np.empty((len(reached.signs), box.values.shape[1]), np.int8)
        of[:] = reached.signs[:, None]
        for place, polynomial, remainder in reached.slopes:
            if not (own[place].any() if place < count else reached.moved[place - count]):
                continue  # it has one value anyway
            least, most = bounds(polynomial, low, high)
            if remainder is not None:
                left_out = _largest(remainder, low, high)
                least, most = least - left_out, most + left_out
            of[place] = _direction(least, most)
        # A resistance moves the gain against its admittance.
        of[:count] *= -1
        of[:count][~own] = FIXED
        of[count:][~reached.moved] = FIXED
        together = np.full((networks, box.values.shape[1]), OPEN, np.int8)
        for members, slope in reached.networks.items():
            is_network = networks_of(box, members)
            if slope is not None and is_network.any():
                together = np.where(is_network, -_direction(*bounds(slope, low, high)), together)
        together[~common] = FIXED
        decades = _decades(np.where(low.y * high.z == 0.0, 1.0, box.values))
        proved = (decades.sum(axis=0) + 2.0 * reached.decades <= DECADES) & (box.ends()[0] > 0.0).all(axis=0)
        of_ideal, of_whole = (_sign(*bounds(polynomial, low, high)) for polynomial in (reached.ideal, reached.whole))
        proved &= (of_ideal != 0) & (of_whole != 0)
        for polynomial in reached.loops:
            least, most = bounds(polynomial, low, high)
            proved &= np.where(of_whole > 0, least >= 0.0, most <= 0.0)
    return Directions(np.concatenate([of[:count], together, of[count:]]), proved)


def _direction(least: FloatArray, most: FloatArray) -> NDArray[np.int8]:
    return np.where(least >= 0.0, RISES, np.where(most <= 0.0, FALLS, OPEN)).astype(np.int8)


def networks_of(box: StageBox, members: tuple[bool, ...]) -> NDArray[np.bool_]:
    """Which networks of the stages have just these members; shape (networks, stages)."""
    places = np.arange(box.common.low.shape[1])[:, None, None]
    return np.asarray(((box.network == places) == np.array(members)[:, None]).all(axis=1))


def _largest(remainder: Remainder, low: coefficients.Pairs, high: coefficients.Pairs) -> FloatArray:
    """Not below the magnitude of any value of what a slope leaves out."""
    total = np.zeros(low.y.shape[1])
    for product in remainder.factors:
        (left, more), (right, further) = (
            tuple(bounds(polynomial, low, high)[1] for polynomial in factor) for factor in product
        )
        total += left * further + more * (right + further)
    return total * (1.0 + ROUNDING)


def _decades(values: FloatArray) -> FloatArray:
    """Decades between each value and 1; none for 0, which leaves nothing of a product anyway."""
    return np.abs(np.log10(np.where(values == 0.0, 1.0, values)))


def _sign(least: FloatArray, most: FloatArray) -> NDArray[np.int8]:
    return np.where(least > 0.0, 1, np.where(most < 0.0, -1, 0)).astype(np.int8)


def bounds(polynomial: Bounded, low: coefficients.Pairs, high: coefficients.Pairs) -> tuple[FloatArray, FloatArray]:
    """Bounds of a polynomial over boxes, their own rounding allowed for.

    Elements enter with y the same and z between `low` and `high`. Under one product of departures every term is
    taken at its own worst end; each product then is at its least or largest, whichever is worse.

    Returns
    -------
    tuple of ndarray, shape (stages,)
        Not above and not below any value. Exactly 0 where the elements that are open or short leave nothing.
    """
    least, most = np.zeros(low.y.shape[1]), np.zeros(low.y.shape[1])
    bounded = bounds_by_product(polynomial, low, high)
    for (below, above), (_, smallest, largest) in zip(bounded, polynomial.products, strict=True):
        least += below * np.where(below < 0.0, largest, smallest)
        most += above * np.where(above > 0.0, largest, smallest)
    return least, most


def bounds_by_product(
    polynomial: Bounded, low: coefficients.Pairs, high: coefficients.Pairs
) -> Iterator[tuple[FloatArray, FloatArray]]:
    """Bounds of what stands with each product of departures, in the order of `polynomial.products`."""
    at_low, at_high = (_terms(polynomial, pairs) for pairs in (low, high))
    weights = polynomial.coefficients[:, None]
    # z falls as an admittance rises, but terms are products of y and z >= 0: all of them grow with z.
    falls = weights < 0.0
    lower, upper = weights * np.where(falls, at_high, at_low), weights * np.where(falls, at_low, at_high)
    size = np.abs(weights) * at_high
    for terms, _, _ in polynomial.products:
        # accumulate() adds one term after the other whatever the number of stages; sum() does not.
        below, above, slack = (np.add.accumulate(table[terms], axis=0)[-1] for table in (lower, upper, size))
        yield below - ROUNDING * slack, above + ROUNDING * slack


def _terms(polynomial: Bounded, pairs: coefficients.Pairs) -> FloatArray:
    """Products of the elements in each term, shape (terms, stages)."""
    found = np.ones((len(polynomial.coefficients), pairs.y.shape[1]))
    for element, degree in enumerate(polynomial.degrees):
        if degree:
            y, z = pairs.y[element], pairs.z[element]
            powers = np.array([z, y] if degree == 1 else [z * z, z * y, y * y])
            found *= powers[polynomial.exponents[:, element]]
    return found
