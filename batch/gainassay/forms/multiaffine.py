"""Multi-affine polynomials: sums of integer multiples of products in which no symbol stands twice.

A product is a bit mask over symbols that the caller numbers; a polynomial maps masks to coefficients, so
that the algebra of networks becomes operations on sets.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cache
from math import gcd


@dataclass(frozen=True, slots=True)
class MultiAffine:
    """A polynomial of degree at most one in each of its symbols.

    Attributes
    ----------
    terms : Mapping[int, int]
        Coefficient of each product; a product is the bit mask of its symbols. No coefficient is zero.
    """

    terms: Mapping[int, int]
    _hash: list[int] = field(default_factory=list, init=False, repr=False, compare=False)

    @staticmethod
    def constant(value: int) -> MultiAffine:
        """The polynomial that is `value` everywhere."""
        return MultiAffine({0: value} if value else {})

    @staticmethod
    def symbol(index: int) -> MultiAffine:
        """The polynomial that is the symbol numbered `index`."""
        return MultiAffine({1 << index: 1})

    def __bool__(self) -> bool:
        return bool(self.terms)

    def __eq__(self, other: object) -> bool:
        return isinstance(other, MultiAffine) and self.terms == other.terms

    def __hash__(self) -> int:
        if not self._hash:
            self._hash.append(hash(frozenset(self.terms.items())))
        return self._hash[0]

    def __iter__(self) -> Iterator[tuple[int, int]]:
        """Products and coefficients, in ascending order of the mask."""
        return iter(sorted(self.terms.items()))

    def __add__(self, other: MultiAffine) -> MultiAffine:
        total = dict(self.terms)
        for mask, coefficient in other.terms.items():
            total[mask] = total.get(mask, 0) + coefficient
        return MultiAffine({mask: value for mask, value in total.items() if value})

    def __neg__(self) -> MultiAffine:
        return MultiAffine({mask: -value for mask, value in self.terms.items()})

    def __sub__(self, other: MultiAffine) -> MultiAffine:
        return self + -other

    def times(self, other: MultiAffine) -> MultiAffine:
        """Product with every square dropped.

        Exact where the factors share no symbol, and inside any sum of products that is known to be
        multi-affine as a whole: there the squares cancel, so they may be dropped as they appear.
        """
        total: dict[int, int] = {}
        for left, left_value in self.terms.items():
            for right, right_value in other.terms.items():
                if not left & right:
                    total[left | right] = total.get(left | right, 0) + left_value * right_value
        return MultiAffine({mask: value for mask, value in total.items() if value})

    def support(self) -> int:
        """Mask of the symbols that occur."""
        mask = 0
        for term in self.terms:
            mask |= term
        return mask

    def content(self) -> int:
        """Greatest common divisor of the coefficients, 0 for the zero polynomial."""
        return gcd(*self.terms.values()) if self.terms else 0

    def within(self, symbols: int) -> MultiAffine:
        """The products of masked symbols alone: all others are 0."""
        return MultiAffine({mask: value for mask, value in self.terms.items() if not mask & ~symbols})

    def split(self, symbol: int) -> tuple[MultiAffine, MultiAffine]:
        """What does not hold the symbol of the mask `symbol`, and the coefficient of that symbol."""
        without: dict[int, int] = {}
        coefficient: dict[int, int] = {}
        for mask, value in self.terms.items():
            if mask & symbol:
                coefficient[mask ^ symbol] = value
            else:
                without[mask] = value
        return MultiAffine(without), MultiAffine(coefficient)

    def inverted(self, symbols: int) -> MultiAffine:
        """The polynomial in the reciprocals of the masked symbols, times the product of these symbols."""
        return MultiAffine({mask ^ symbols: value for mask, value in self.terms.items()})

    def degree(self) -> int:
        """Largest number of symbols in one product."""
        return max((mask.bit_count() for mask in self.terms), default=0)

    def collect(self, symbols: int) -> dict[int, MultiAffine]:
        """Coefficients, as polynomials, of the products of the symbols in the mask `symbols`.

        Returns
        -------
        dict[int, MultiAffine]
            Keyed by the product, in ascending order of the mask.
        """
        parts: dict[int, dict[int, int]] = {}
        for mask, value in self.terms.items():
            parts.setdefault(mask & symbols, {})[mask & ~symbols] = value
        return {product: MultiAffine(parts[product]) for product in sorted(parts)}


_MODULUS = (1 << 61) - 1


def factors(polynomial: MultiAffine) -> tuple[int, tuple[MultiAffine, ...]]:
    """An integer and the irreducible factors, each primitive and with a positive first coefficient.

    The factors of a multi-affine polynomial share no symbols. Symbol y is in the factor of x if and only if
    p p_xy != p_x p_y, which is asked at one point modulo a prime: the answer "unequal" is certain, and a factor
    split off after the answer "equal" is kept only if multiplying out gives the polynomial back.
    """
    if not polynomial:
        return 0, ()
    common = -1
    for mask in polynomial.terms:
        common &= mask
    content = polynomial.content()
    first = min(polynomial.terms)
    content = -content if polynomial.terms[first] < 0 else content
    found = [MultiAffine({1 << i: 1}) for i in range(common.bit_length()) if common >> i & 1]
    rest = MultiAffine({mask ^ common: value // content for mask, value in polynomial.terms.items()})
    while rest.support():
        factor, rest = _first_factor(rest)
        found.append(factor)
    return content, tuple(sorted(found, key=_lowest_symbol))


def _lowest_symbol(polynomial: MultiAffine) -> int:
    support = polynomial.support()
    return support & -support


def _first_factor(polynomial: MultiAffine) -> tuple[MultiAffine, MultiAffine]:
    """The irreducible factor that holds the lowest symbol, and the cofactor.

    The polynomial is primitive and its first coefficient positive, hence so are both.
    """
    group = _symbols_of_first_factor(polynomial)
    others = polynomial.support() & ~group
    if not others:
        return polynomial, MultiAffine.constant(1)
    terms = polynomial.terms
    first = min(terms)
    factor = _primitive({mask & group: value for mask, value in terms.items() if not (mask ^ first) & others})
    cofactor = _primitive({mask & others: value for mask, value in terms.items() if not (mask ^ first) & group})
    if len(terms) != len(factor.terms) * len(cofactor.terms) or factor.times(cofactor) != polynomial:
        return polynomial, MultiAffine.constant(1)  # the point was unlucky: leave the polynomial whole
    return factor, cofactor


def _primitive(terms: dict[int, int]) -> MultiAffine:
    """The terms divided by their content, the first coefficient made positive."""
    content = gcd(*terms.values())
    content = -content if terms[min(terms)] < 0 else content
    return MultiAffine({mask: value // content for mask, value in terms.items()})


def _symbols_of_first_factor(polynomial: MultiAffine) -> int:
    """Mask of the symbols in the factor of the lowest symbol, perhaps too few of them (see `factors`)."""
    pivot = _lowest_symbol(polynomial)
    whole = with_pivot = 0
    with_symbol: dict[int, int] = {}
    with_both: dict[int, int] = {}
    for mask, coefficient in polynomial.terms.items():
        value = coefficient
        rest = mask
        while rest:
            bit = rest & -rest
            value = value * _point(bit.bit_length()) % _MODULUS
            rest ^= bit
        whole += value
        holds_pivot = mask & pivot
        if holds_pivot:
            with_pivot += value
        rest = mask & ~pivot
        while rest:
            bit = rest & -rest
            with_symbol[bit] = with_symbol.get(bit, 0) + value
            if holds_pivot:
                with_both[bit] = with_both.get(bit, 0) + value
            rest ^= bit
    group = pivot
    for bit, value in with_symbol.items():
        if (with_both.get(bit, 0) * whole - with_pivot * value) % _MODULUS:
            group |= bit
    return group


@cache
def _point(index: int) -> int:
    """The value at which the symbol of that index is tried: fixed, and without pattern."""
    return pow(3, 1_000_003 * index * index + 17, _MODULUS)


MOST_FORMED = 2_000_000
"""Products that the expansion of a determinant may form; a network that needs more is too meshed to be read."""


class TooLargeError(ArithmeticError):
    """A determinant with more products than `MOST_FORMED`."""


Row = Mapping[int, MultiAffine]
"""A sparse row of a matrix: column -> entry."""


def determinant(rows: Sequence[Row], columns: Sequence[int]) -> MultiAffine:
    """Determinant of the square matrix that the `rows` have in the given `columns`, in that order.

    Expansion along one row after the other, with every minor remembered under its set of columns; no
    division. Squares of symbols are dropped, which is exact if the determinant is multi-affine, as it is
    where each symbol enters the matrix with rank one.

    Raises
    ------
    TooLargeError
        If the expansion would form more than `MOST_FORMED` products.
    """
    place = {column: position for position, column in enumerate(columns)}
    # Sparse rows first: fewer sets of columns are left to visit. A permutation of rows changes the sign only.
    order = sorted(range(len(rows)), key=lambda row: (sum(column in place for column in rows[row]), row))
    minors: dict[int, MultiAffine] = {0: MultiAffine.constant(1)}
    formed = 0

    def minor(remaining: int) -> MultiAffine:
        """Determinant of the last rows in the columns whose places are in the mask `remaining`."""
        nonlocal formed
        if remaining not in minors:
            row = rows[order[len(rows) - remaining.bit_count()]]
            total = MultiAffine({})
            for column, entry in row.items():
                bit = 1 << place[column] if column in place else 0
                if remaining & bit:
                    before = (remaining & (bit - 1)).bit_count()
                    cofactor = minor(remaining ^ bit)
                    formed += len(entry.terms) * len(cofactor.terms)
                    if formed > MOST_FORMED:
                        raise TooLargeError
                    product = entry.times(cofactor)
                    total = total - product if before % 2 else total + product
            minors[remaining] = total
        return minors[remaining]

    return minor((1 << len(rows)) - 1) if _is_even(order) else -minor((1 << len(rows)) - 1)


def _is_even(order: Sequence[int]) -> bool:
    inversions = sum(earlier > later for index, later in enumerate(order) for earlier in order[:index])
    return inversions % 2 == 0
