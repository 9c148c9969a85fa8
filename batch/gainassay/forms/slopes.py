"""How a gain moves with each of its variables: numerators of partial derivatives, as polynomials.

With N = N_0 + x N_1 and D = D_0 + x D_1 the partial derivative of N/D in x has the sign of N_1 D_0 - N_0 D_1: the
terms with x cancel, and every other variable is left with a degree of at most two. Subtracted here, as
polynomials, such a difference keeps its sign; subtracted as floating-point products it drowns in cancellation.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gainassay.forms.multiaffine import MultiAffine

Polynomial = tuple[tuple[int, tuple[int, ...]], ...]
"""Terms (coefficient, exponent of each variable), in a fixed order."""

MOST_PRODUCTS = 70_000
"""Products of terms that a slope may take to form whole; beyond it forming and bounding it costs more than it saves."""

MOST_PACKED = 31
"""Variables whose two exponents fit into one integer."""

MOST_SCALED = 4_000_000
"""Products of terms that the slope of a common factor may take."""


@dataclass(frozen=True)
class Slope:
    """The numerator of the gain's partial derivative in one variable, an admittance or a departure.

    Attributes
    ----------
    sign : int
        1 or -1 where all coefficients agree in sign, so that the slope has this sign whatever the values (1 also
        for a slope that is 0 everywhere); 0 where the sign depends on the values, or nothing is known.
    terms : tuple
        Where the sign depends on the values, the slope divided by the departures that divide all its terms, in
        the order of the products of departures; empty where nothing is known.
    is_whole : bool
        Whether `terms` are all terms. Where these are too many to form, only those without any departure are,
        N_1 and D_1 being divided by the departures that all their terms share: the others are small beside them,
        and their magnitudes bound them.
    """

    sign: int
    terms: Polynomial
    is_whole: bool


def slopes(numerator: MultiAffine, denominator: MultiAffine, elements: int, departures: int) -> tuple[Slope, ...]:
    """Slopes of numerator / denominator in each element's admittance, then in each departure."""
    return tuple(_slope(numerator, denominator, 1 << i, elements, departures) for i in range(elements + departures))


def of_common_factor(numerator: Polynomial, denominator: Polynomial, members: Sequence[bool]) -> Polynomial | None:
    """Numerator of the gain's derivative in the logarithm of a factor common to the admittances of some elements.

    With x the sum of y_i d/dy_i over these elements, a product's x is the product times the number of members in it;
    the numerator is (x N) D - N (x D), in which all pairs of products with as many members cancel. So what leaves the
    elements' ratios alone moves an ideal gain of ratios not at all, exactly.

    Parameters
    ----------
    members : sequence of bool
        For each element whether it is one.

    Returns
    -------
    Polynomial or None
        None where it would take more than `MOST_SCALED` products of terms, or has more than `MOST_PACKED` variables.
    """
    variables = len(denominator[0][1])
    if len(numerator) * len(denominator) > MOST_SCALED or variables > MOST_PACKED:
        return None
    chosen = sum(1 << i for i, member in enumerate(members) if member)
    (top, over), (bottom, under) = (_masks(polynomial) for polynomial in (numerator, denominator))
    counts = [np.bitwise_count(masks & chosen).astype(np.int64) for masks in (top, bottom)]
    left, right = np.nonzero(counts[0][:, None] != counts[1])
    keys = ((top[left] & bottom[right]) << 32) | top[left] | bottom[right]
    products, place = np.unique(keys, return_inverse=True)
    sums = np.zeros(len(products), np.int64)
    np.add.at(sums, place, over[left] * under[right] * (counts[0][left] - counts[1][right]))
    found = zip(products.tolist(), sums.tolist(), strict=True)
    return tuple((value, _exponents(key >> 32, key & 0xFFFFFFFF, variables)) for key, value in found if value)


def _masks(polynomial: Polynomial) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    masks = [sum(e << i for i, e in enumerate(exponents)) for _, exponents in polynomial]
    return np.array(masks, np.int64), np.array([value for value, _ in polynomial], np.int64)


def polynomial(multiaffine: MultiAffine, variables: int) -> Polynomial:
    """The terms of a multi-affine polynomial."""
    return tuple((value, _exponents(0, mask, variables)) for mask, value in multiaffine)


def _slope(numerator: MultiAffine, denominator: MultiAffine, variable: int, elements: int, departures: int) -> Slope:
    (n_0, n_1), (d_0, d_1) = numerator.split(variable), denominator.split(variable)
    if len(n_1.terms) * len(d_0.terms) + len(n_0.terms) * len(d_1.terms) > MOST_PRODUCTS:
        return _leading(n_0, n_1, d_0, d_1, elements, departures)
    terms = _difference(n_1, d_0, n_0, d_1)
    signs = {value > 0 for value in terms.values()}
    if len(signs) < 2:
        return Slope(-1 if signs == {False} else 1, (), True)
    return Slope(0, _ordered(terms, elements, departures), True)


def _leading(
    n_0: MultiAffine, n_1: MultiAffine, d_0: MultiAffine, d_1: MultiAffine, elements: int, departures: int
) -> Slope:
    mask = ((1 << departures) - 1) << elements
    shared = mask
    for term in (*n_1.terms, *d_1.terms):
        shared &= term

    def ideal(polynomial: MultiAffine, product: int) -> MultiAffine:
        return polynomial.collect(mask).get(product, MultiAffine({}))

    terms = _difference(ideal(n_1, shared), ideal(d_0, 0), ideal(n_0, 0), ideal(d_1, shared))
    return Slope(0, _ordered(terms, elements, departures), False) if terms else Slope(0, (), False)


def _difference(n_1: MultiAffine, d_0: MultiAffine, n_0: MultiAffine, d_1: MultiAffine) -> dict[tuple[int, int], int]:
    """N_1 D_0 - N_0 D_1: coefficients by what is in both factors, so a square, and what is in any."""
    found: dict[tuple[int, int], int] = {}
    for square, union, value in (*_products(n_1, d_0), *_products(-n_0, d_1)):
        found[square, union] = found.get((square, union), 0) + value
    return {key: value for key, value in found.items() if value}


def _products(left: MultiAffine, right: MultiAffine) -> Iterator[tuple[int, int, int]]:
    for one, value in left.terms.items():
        for other, factor in right.terms.items():
            yield one & other, one | other, value * factor


def _ordered(terms: dict[tuple[int, int], int], elements: int, departures: int) -> Polynomial:
    """Terms ordered by their departures, without the departures that all of them share."""
    rows = [(_exponents(square, union, elements + departures), value) for (square, union), value in terms.items()]
    shared = [min(column) for column in zip(*(exponents[elements:] for exponents, _ in rows), strict=True)]
    reduced = [
        ((*exponents[:elements], *(e - s for e, s in zip(exponents[elements:], shared, strict=True))), value)
        for exponents, value in rows
    ]
    return tuple(
        (value, exponents) for exponents, value in sorted(reduced, key=lambda row: (row[0][elements:], row[0]))
    )


def _exponents(square: int, union: int, variables: int) -> tuple[int, ...]:
    return tuple((square >> i & 1) + (union >> i & 1) for i in range(variables))
