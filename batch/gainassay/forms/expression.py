"""A formula as a tree of values: impedances in series and in parallel, ratios, and comparisons with unity.

A tree is built by `series`, `parallel`, `total` and `product`, which keep it flat and in one fixed order, so
that equal formulas are equal trees. Trees know nothing of the algebra that finds them, nor of how they are
shown.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from fractions import Fraction


@dataclass(frozen=True, slots=True)
class Number:
    """A rational number."""

    value: Fraction


@dataclass(frozen=True, slots=True)
class Quantity:
    """What has a name of its own: an element's impedance, or a data-sheet quantity of an amplifier.

    Attributes
    ----------
    symbol : int
        Position of its symbol in the network function that the formula writes.
    name : str
        How it is called: `r1`, `A`, `r_id_u2`.
    kind : str
        `resistor`, `capacitor`, `inductor`, or the error term of the departure, such as `open_loop_gain`.
    reciprocal : bool
        True if the symbol stands for 1/quantity, as an admittance does for an impedance and a for A = 1/a.
    """

    symbol: int
    name: str
    kind: str
    reciprocal: bool


@dataclass(frozen=True, slots=True)
class Series:
    """Impedances in series: their sum."""

    parts: tuple[Expression, ...]


@dataclass(frozen=True, slots=True)
class Parallel:
    """Impedances in parallel: the reciprocal of the sum of their reciprocals."""

    parts: tuple[Expression, ...]


@dataclass(frozen=True, slots=True)
class Sum:
    """A sum; with 1 as its first addend it compares the others with unity."""

    addends: tuple[Expression, ...]


@dataclass(frozen=True, slots=True)
class Product:
    """coefficient * over[0] * over[1] ... / (under[0] * under[1] ...)."""

    coefficient: Fraction
    over: tuple[Expression, ...]
    under: tuple[Expression, ...]


Expression = Number | Quantity | Series | Parallel | Sum | Product

ONE = Number(Fraction(1))


def quantities(expression: Expression) -> Iterator[Quantity]:
    """Every occurrence of a named quantity, from left to right."""
    if isinstance(expression, Quantity):
        yield expression
    for child in children(expression):
        yield from quantities(child)


def children(expression: Expression) -> tuple[Expression, ...]:
    """The expressions of which an expression is made."""
    match expression:
        case Series(parts) | Parallel(parts):
            return parts
        case Sum(addends):
            return addends
        case Product(_, over, under):
            return (*over, *under)
        case _:
            return ()


def length(expression: Expression) -> int:
    """How much there is to read: two for each named quantity, one for each number or sign.

    A negative impedance in parallel, which a reader must think about, counts more.
    """
    match expression:
        case Number():
            return 1
        case Quantity():
            return 2
        case Product(coefficient, over, under):
            own = (abs(coefficient) != 1) + (coefficient < 0)
            return own + sum(map(length, over)) + sum(map(length, under))
        case Parallel(parts):
            return sum(map(length, parts)) + 3 * sum(map(is_negative, parts))
        case Series(parts) | Sum(parts):
            return sum(map(length, parts))


def is_negative(expression: Expression) -> bool:
    """Whether the expression is written with a minus in front."""
    match expression:
        case Number(value):
            return value < 0
        case Product(coefficient, _, _):
            return coefficient < 0
        case _:
            return False


def series(parts: Iterable[Expression]) -> Expression:
    """Impedances in series, single elements first."""
    flat = _flat(parts, Series)
    return flat[0] if len(flat) == 1 else Series(tuple(sorted(flat, key=lambda p: (is_negative(p), _place(p)))))


def parallel(parts: Iterable[Expression]) -> Expression:
    """Impedances in parallel, single elements first."""
    flat = _flat(parts, Parallel)
    return flat[0] if len(flat) == 1 else Parallel(tuple(sorted(flat, key=_place)))


def total(addends: Iterable[Expression]) -> Expression:
    """Sum of the addends in their order, all numbers gathered in front, what is subtracted behind."""
    flat = _flat(addends, Sum)
    constant = sum((addend.value for addend in flat if isinstance(addend, Number)), Fraction(0))
    rest = [addend for addend in flat if not isinstance(addend, Number)]
    kept = [Number(constant), *rest] if constant or not rest else rest
    return kept[0] if len(kept) == 1 else Sum(tuple(sorted(kept, key=is_negative)))


def product(
    over: Iterable[Expression], under: Iterable[Expression] = (), coefficient: Fraction | int = 1
) -> Expression:
    """coefficient * product of `over` / product of `under`, what stands in both cancelled.

    Impedances and gains come in a fixed order; sums, which correct them, follow in the order given.
    """
    factor = Fraction(coefficient)
    flat_over: list[Expression] = []
    flat_under: list[Expression] = []
    for inverse, given in ((False, over), (True, under)):
        here, there = (flat_under, flat_over) if inverse else (flat_over, flat_under)
        for expression in given:
            match expression:
                case Number(value):
                    factor = factor / value if inverse else factor * value
                case Product(inner, inner_over, inner_under):
                    factor = factor / inner if inverse else factor * inner
                    here.extend(inner_over)
                    there.extend(inner_under)
                case _:
                    here.append(expression)
    for expression in list(flat_over):
        if expression in flat_under:
            flat_over.remove(expression)
            flat_under.remove(expression)
    if not flat_under and not flat_over:
        return Number(factor)
    if factor == 1 and not flat_under and len(flat_over) == 1:
        return flat_over[0]
    return Product(factor, tuple(_in_order(flat_over)), tuple(_in_order(flat_under)))


def quotient(numerator: Expression, denominator: Expression) -> Expression:
    """numerator / denominator."""
    return product([numerator], [denominator])


def is_sum(expression: Expression) -> bool:
    """Whether the expression is a sum that is no impedance in series."""
    return isinstance(expression, Sum)


def _in_order(factors: list[Expression]) -> list[Expression]:
    plain = sorted((f for f in factors if not is_sum(f)), key=_place)
    return plain + [f for f in factors if is_sum(f)]


def _flat(parts: Iterable[Expression], kind: type[Series] | type[Parallel] | type[Sum]) -> list[Expression]:
    flat: list[Expression] = []
    for part in parts:
        flat.extend(children(part) if isinstance(part, kind) else (part,))
    return flat


def _place(expression: Expression) -> tuple[bool, int, tuple[int, ...]]:
    """Single quantities before groups, gains before impedances, short groups before long ones."""
    symbols = tuple(quantity.symbol for quantity in quantities(expression))
    single = isinstance(expression, Quantity)
    gain = single and not expression.kind.endswith(("resistance", "resistor", "capacitor", "inductor"))  # type: ignore[union-attr]
    return (not single, 0 if gain else length(expression), symbols)
