"""The proof that a formula is the network function it claims to write: an identity of polynomials.

The formula is evaluated to a ratio of polynomials in a sparse ring of sympy's, from its leaves upwards, with
nothing taken over from the algebra that found it. Symbols are named by their position: no name that a user
chose reaches sympy.

A ratio is kept as powers of polynomials, so that a product multiplies nothing out and what stands above and
below is dropped as it meets. Dropping is for speed; the proof is the last comparison, of cross products.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from fractions import Fraction
from typing import Any

from gainassay.errors import GainassayError
from gainassay.forms.expression import Expression, Number, Parallel, Product, Quantity, Series, Sum
from gainassay.forms.multiaffine import MultiAffine, factors


class ProofError(GainassayError):
    """A formula that is not the function it claims to be: an internal fault, and never shown."""


def prove(expression: Expression, numerator: MultiAffine, denominator: MultiAffine, symbols: int) -> None:
    """Prove that the expression is numerator / denominator.

    Parameters
    ----------
    symbols : int
        Number of symbols; quantities and the bits of the polynomials' products name them by position.

    Raises
    ------
    ProofError
        If it is not.
    """
    evaluation = _Evaluation(symbols)
    over, under = evaluation.expanded(evaluation.powers(expression))
    top, bottom = evaluation.lift(numerator), evaluation.lift(denominator)
    if not under or not bottom or not _same_ratio(over, under, top, bottom):
        raise ProofError("internal fault: a formula could not be proved equal to the network function it writes")


def _same_ratio(over: Any, under: Any, top: Any, bottom: Any) -> bool:
    """Whether over/under = top/bottom; first as equal polynomials, which is quick."""
    if not over or not top:
        return not over and not top
    given, found = bottom.LC, under.LC
    over, under = over.mul_ground(given), under.mul_ground(given)
    top, bottom = top.mul_ground(found), bottom.mul_ground(found)
    return bool((over == top and under == bottom) or over * bottom == under * top)


@dataclass(frozen=True)
class _Powers:
    """number * product of polynomials to integer powers."""

    number: Fraction
    exponents: Counter[Any]

    def to(self, power: int) -> _Powers:
        return _Powers(self.number**power, Counter({p: power * e for p, e in self.exponents.items()}))

    def times(self, other: _Powers) -> _Powers:
        exponents = Counter(self.exponents)
        for polynomial, exponent in other.exponents.items():
            exponents[polynomial] += exponent
        return _Powers(self.number * other.number, Counter({p: e for p, e in exponents.items() if e}))

    def parts(self, sign: int) -> Iterator[tuple[Any, int]]:
        """Polynomials that stand above (sign 1) or below (sign -1), with positive exponents."""
        return ((p, sign * e) for p, e in self.exponents.items() if sign * e > 0)


class _Evaluation:
    """Values of the expressions of a tree in one ring; each subtree is evaluated once."""

    def __init__(self, symbols: int) -> None:
        from sympy.polys.domains import ZZ
        from sympy.polys.rings import PolyRing

        self._ring: Any = PolyRing([f"y{index}" for index in range(symbols)], ZZ)
        self._known: dict[Expression, _Powers] = {}

    def lift(self, polynomial: MultiAffine) -> Any:
        count = self._ring.ngens
        return self._ring.from_dict({tuple(mask >> i & 1 for i in range(count)): v for mask, v in polynomial})

    def expanded(self, powers: _Powers) -> tuple[Any, Any]:
        """Numerator and denominator, multiplied out."""
        return (
            self._product(powers.parts(1)).mul_ground(powers.number.numerator),
            self._product(powers.parts(-1)).mul_ground(powers.number.denominator),
        )

    def powers(self, expression: Expression) -> _Powers:
        if expression not in self._known:
            self._known[expression] = self._evaluate(expression)
        return self._known[expression]

    def _evaluate(self, expression: Expression) -> _Powers:
        match expression:
            case Number(value):
                return _Powers(value, Counter())
            case Quantity(symbol, _, _, reciprocal):
                return _Powers(Fraction(1), Counter({self._ring.gens[symbol]: -1 if reciprocal else 1}))
            case Product(coefficient, over, under):
                found = _Powers(coefficient, Counter())
                for factor in over:
                    found = found.times(self.powers(factor))
                for factor in under:
                    found = found.times(self.powers(factor).to(-1))
                return found
            case Series(parts) | Sum(parts):
                return self._sum([self.powers(part) for part in parts])
            case Parallel(parts):
                return self._sum([self.powers(part).to(-1) for part in parts]).to(-1)

    def _sum(self, addends: list[_Powers]) -> _Powers:
        """The sum over the common denominator, as far as the denominators' polynomials show it."""
        polynomials = dict.fromkeys(p for addend in addends for p in addend.exponents)
        common = Counter({p: min(addend.exponents[p] for addend in addends) for p in polynomials})
        scale = 1
        for addend in addends:
            scale *= addend.number.denominator
        total = self._ring.zero
        for addend in addends:
            rest = ((p, addend.exponents[p] - common[p]) for p in polynomials)
            total += self._product(rest).mul_ground(int(addend.number * scale))
        if not total:
            raise ProofError("internal fault: a formula divides by zero or adds up to it")
        shared = [p for p in polynomials if sum(addend.exponents[p] == common[p] < 0 for addend in addends) > 1]
        for polynomial in shared:  # only these can divide the total: the addends were in lowest terms
            while common[polynomial] < 0:
                quotient, remainder = total.div(polynomial)
                if remainder:
                    break
                total = quotient
                common[polynomial] += 1
        result = _Powers(Fraction(1, scale), Counter({p: e for p, e in common.items() if e}))
        return result.times(self._factored(total))

    def _factored(self, polynomial: Any) -> _Powers:
        """The polynomial's factors where it is multi-affine, each checked by multiplying out."""
        if any(exponent > 1 for exponents in polynomial for exponent in exponents):
            content, primitive = polynomial.primitive()
            return _Powers(Fraction(int(content)), Counter({primitive: 1}))
        masks = {
            sum(1 << i for i, exponent in enumerate(exponents) if exponent): int(value)
            for exponents, value in polynomial.items()
        }
        content, found = factors(MultiAffine(masks))
        lifted = Counter(self.lift(factor) for factor in found)
        if self._product(lifted.items()).mul_ground(content) != polynomial:
            return _Powers(Fraction(1), Counter({polynomial: 1}))
        return _Powers(Fraction(content), lifted)

    def _product(self, powers: Iterable[tuple[Any, int]]) -> Any:
        found = self._ring.one
        for polynomial, exponent in sorted(powers, key=lambda power: len(power[0])):
            found *= polynomial**exponent if exponent > 1 else polynomial if exponent else self._ring.one
        return found
