"""Multi-affine polynomials: sums of integer multiples of products in which no symbol stands twice.

A product is a bit mask over symbols that the caller numbers; a polynomial maps masks to coefficients, so
that the algebra of networks becomes operations on sets.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
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
        return isinstance(other, MultiAffine) and dict(self.terms) == dict(other.terms)

    def __hash__(self) -> int:
        return hash(frozenset(self.terms.items()))

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

    def divided_by(self, divisor: int) -> MultiAffine:
        """All coefficients divided by an integer that divides each of them."""
        return MultiAffine({mask: value // divisor for mask, value in self.terms.items()})

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


Row = Mapping[int, MultiAffine]
"""A sparse row of a matrix: column -> entry."""


def determinant(rows: Sequence[Row], columns: Sequence[int]) -> MultiAffine:
    """Determinant of the square matrix that the `rows` have in the given `columns`, in that order.

    Expansion along one row after the other, with every minor remembered under its set of columns; no
    division. Squares of symbols are dropped, which is exact if the determinant is multi-affine, as it is
    where each symbol enters the matrix with rank one.
    """
    place = {column: position for position, column in enumerate(columns)}
    # Sparse rows first: fewer sets of columns are left to visit. A permutation of rows changes the sign only.
    order = sorted(range(len(rows)), key=lambda row: (sum(column in place for column in rows[row]), row))
    minors: dict[int, MultiAffine] = {0: MultiAffine.constant(1)}

    def minor(remaining: int) -> MultiAffine:
        """Determinant of the last rows in the columns whose places are in the mask `remaining`."""
        if remaining not in minors:
            row = rows[order[len(rows) - remaining.bit_count()]]
            total = MultiAffine({})
            for column, entry in row.items():
                bit = 1 << place[column] if column in place else 0
                if remaining & bit:
                    before = (remaining & (bit - 1)).bit_count()
                    product = entry.times(minor(remaining ^ bit))
                    total = total - product if before % 2 else total + product
            minors[remaining] = total
        return minors[remaining]

    return minor((1 << len(rows)) - 1) if _is_even(order) else -minor((1 << len(rows)) - 1)


def _is_even(order: Sequence[int]) -> bool:
    inversions = sum(earlier > later for index, later in enumerate(order) for earlier in order[:index])
    return inversions % 2 == 0
