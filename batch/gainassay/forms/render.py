"""Formulas as a person or a program reads them: text, LaTeX, MathML, and a tree for JSON.

One walk over the tree decides signs, order and parentheses; a `Notation` says how each piece looks. Operators
bind, loosest first: + and -, then parallel, then product and quotient; parentheses stand only where needed.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from fractions import Fraction
from html import escape
from typing import Any

from gainassay.forms.expression import (
    Expression,
    Number,
    Parallel,
    Product,
    Quantity,
    Series,
    Sum,
    is_negative,
    is_sum,
    product,
)

WIDTH = 100
"""Columns of a line of text."""

_SUM, _PARALLEL, _PRODUCT, _ATOM = range(4)


@dataclass(frozen=True)
class Piece:
    """A piece of a formula as it is shown, and how tightly its outermost operator binds."""

    shown: str
    binding: int


@dataclass(frozen=True)
class Notation:
    """How pieces of formulas look.

    Attributes
    ----------
    number : Callable[[int], str]
        A whole number that is not negative.
    name : Callable[[str], str]
        The name of a quantity.
    frequency : Callable[[int], str]
        A positive power of the complex frequency s.
    grouped : Callable[[str], str]
        Something in parentheses.
    joined : Callable[[Sequence[str], str], str]
        Pieces joined by an operator: `+`, `-`, or `||`; with `-` and one piece, its negative.
    times : Callable[[Sequence[Piece]], str]
        A product of pieces that bind as atoms.
    fraction : Callable[[Sequence[Piece], Sequence[Piece]], Piece]
        A quotient of two products; the second is not empty.
    """

    number: Callable[[int], str]
    name: Callable[[str], str]
    frequency: Callable[[int], str]
    grouped: Callable[[str], str]
    joined: Callable[[Sequence[str], str], str]
    times: Callable[[Sequence[Piece]], str]
    fraction: Callable[[Sequence[Piece], Sequence[Piece]], Piece]


def text(expression: Expression, unicode: bool = False) -> str:
    """The formula on one line.

    >>> r1, r2 = (Quantity(i, f"r{i + 1}", "resistor", True) for i in range(2))
    >>> text(Product(Fraction(-1), (r2,), (r1,)))
    '-r2/r1'
    """
    return _shown(expression, UNICODE if unicode else ASCII)


def lines(expression: Expression, width: int = WIDTH, unicode: bool = False) -> list[str]:
    """The formula on as many lines as the width asks for, broken at its outermost operators."""
    return _broken(expression, UNICODE if unicode else ASCII, width)


def latex(expression: Expression) -> str:
    """The formula for LaTeX's mathematics mode."""
    return _shown(expression, LATEX)


def latex_symbol(symbol: str) -> str:
    """What stands left of the equals sign, for LaTeX.

    >>> latex_symbol("z_in"), latex_symbol("gain"), latex_symbol("T")
    ('z_{\\\\mathrm{in}}', '\\\\mathit{gain}', 'T')
    """
    return _latex_name(symbol)


def mathml(expression: Expression) -> str:
    """The formula as a presentation MathML element."""
    row = f"<mrow>{_shown(expression, MATHML)}</mrow>"
    return f'<math xmlns="http://www.w3.org/1998/Math/MathML" display="block">{row}</math>'


def tree(expression: Expression) -> dict[str, Any]:
    """The formula as dictionaries and lists, for JSON; `expression_of` reads it back."""
    match expression:
        case Number(value):
            return {"number": str(value)}
        case Quantity(symbol, name, kind, reciprocal):
            return {"quantity": name, "kind": kind, "symbol": symbol, "reciprocal": reciprocal}
        case Series(parts):
            return {"series": [tree(part) for part in parts]}
        case Parallel(parts):
            return {"parallel": [tree(part) for part in parts]}
        case Sum(addends):
            return {"sum": [tree(addend) for addend in addends]}
        case Product(coefficient, over, under):
            return {
                "product": [tree(factor) for factor in over],
                "divided_by": [tree(factor) for factor in under],
                "coefficient": str(coefficient),
            }


def expression_of(found: Mapping[str, Any]) -> Expression:
    """The formula that `tree` wrote."""
    match found:
        case {"number": value}:
            return Number(Fraction(value))
        case {"quantity": name, "kind": kind, "symbol": symbol, "reciprocal": reciprocal}:
            return Quantity(symbol, name, kind, reciprocal)
        case {"series": parts}:
            return Series(tuple(map(expression_of, parts)))
        case {"parallel": parts}:
            return Parallel(tuple(map(expression_of, parts)))
        case {"sum": addends}:
            return Sum(tuple(map(expression_of, addends)))
        case {"product": over, "divided_by": under, "coefficient": coefficient}:
            return Product(Fraction(coefficient), tuple(map(expression_of, over)), tuple(map(expression_of, under)))
        case _:
            raise ValueError(f"no formula: {found!r}")


def _shown(expression: Expression, notation: Notation) -> str:
    return _piece(expression, notation).shown


def _piece(expression: Expression, notation: Notation) -> Piece:
    match expression:
        case Number(value):
            return _piece_of_product(Product(value, (), ()), notation)
        case Quantity(_, name, kind, _):
            if kind in ("capacitor", "inductor"):
                return _piece_of_product(Product(Fraction(1), (expression,), ()), notation)
            return Piece(notation.name(name), _ATOM)
        case Series(parts) | Sum(parts):
            shown = _piece(parts[0], notation).shown
            for part in parts[1:]:
                operator = "-" if is_negative(part) else "+"
                # After a minus a sum needs its parentheses, though it binds as loosely as the sum around it.
                magnitude = _magnitude(part)
                piece = _bound(magnitude, notation, _PARALLEL) if operator == "-" else _piece(magnitude, notation)
                shown = notation.joined([shown, piece.shown], operator)
            return Piece(shown, _SUM)
        case Parallel(parts):
            return Piece(notation.joined([_bound(part, notation, _PRODUCT).shown for part in parts], "||"), _PARALLEL)
        case Product():
            return _piece_of_product(expression, notation)


def _bound(expression: Expression, notation: Notation, least: int) -> Piece:
    """The expression, in parentheses if it binds less tightly than `least`, or is negative."""
    piece = _piece(expression, notation)
    if piece.binding < least or is_negative(expression):
        return Piece(notation.grouped(piece.shown), _ATOM)
    return piece


def _magnitude(expression: Expression) -> Expression:
    if not is_negative(expression):
        return expression
    match expression:
        case Product(coefficient, over, under):
            return product(over, under, -coefficient)
        case Number(value):
            return Number(-value)
        case _:
            return expression


def _piece_of_product(expression: Product, notation: Notation) -> Piece:
    if expression.coefficient < 0:
        positive = Product(-expression.coefficient, expression.over, expression.under)
        return Piece(notation.joined([_piece_of_product(positive, notation).shown], "-"), _PRODUCT)
    (over, under), (sums_over, sums_under) = _parts(expression, notation)
    if sums_under and not sums_over:
        under, sums_under = under + sums_under, []
    if not under and not sums_under:
        factors = over + sums_over
        return factors[0] if len(factors) == 1 else Piece(notation.times(factors), _PRODUCT)
    if under and not sums_over:
        return notation.fraction(over, under)
    if under and not sums_under:
        head = notation.fraction(over, under)
        return Piece(notation.times([_as_factor(head, notation), *sums_over]), _PRODUCT)
    if under:
        head = notation.fraction(over, under)
        return notation.fraction([_as_factor(head, notation), *sums_over], sums_under)
    return notation.fraction(over + sums_over, sums_under)


def _as_factor(head: Piece, notation: Notation) -> Piece:
    return head if head.binding == _ATOM else Piece(notation.grouped(head.shown), _ATOM)


def _parts(
    expression: Product, notation: Notation
) -> tuple[tuple[list[Piece], list[Piece]], tuple[list[Piece], list[Piece]]]:
    """What stands above and below: numbers, s, names and impedances; then sums, above and below."""
    plain: tuple[list[Piece], list[Piece]] = ([], [])
    sums: tuple[list[Piece], list[Piece]] = ([], [])
    power = 0
    for side, sign, given in ((0, 1, expression.over), (1, -1, expression.under)):
        for factor in given:
            if isinstance(factor, Quantity) and factor.kind in ("capacitor", "inductor"):
                upwards = factor.kind == "inductor"
                power += sign if upwards else -sign
                piece = Piece(notation.name(factor.name), _ATOM)
                if upwards:
                    plain[side].append(piece)
                else:
                    plain[1 - side].insert(0, piece)
            else:
                (sums if is_sum(factor) else plain)[side].append(_bound(factor, notation, _ATOM))
    if power:
        plain[power < 0].insert(0, Piece(notation.frequency(abs(power)), _ATOM))
    for side, number in enumerate((expression.coefficient.numerator, expression.coefficient.denominator)):
        if number != 1 or (side == 0 and not plain[0] and not sums[0]):
            plain[side].insert(0, Piece(notation.number(number), _ATOM))
    if plain[0] and plain[0][0].shown == notation.number(1) and not plain[1] and sums[0]:
        plain[0].pop(0)
    if not plain[0] and plain[1]:
        plain[0].append(Piece(notation.number(1), _ATOM))
    return plain, sums


def _broken(expression: Expression, notation: Notation, width: int) -> list[str]:
    """The expression on lines, further operators under its first piece."""
    whole = _shown(expression, notation)
    if len(whole) <= width:
        return [whole]
    match expression:
        case Series(parts) | Sum(parts):
            marked = [("- " if is_negative(part) else "+ ", _magnitude(part)) for part in parts]
            if isinstance(parts[0], Number):  # what is compared with 1 stands beside it
                marked[1] = (f"{_shown(parts[0], notation)} {marked[1][0]}", marked[1][1])
                del marked[0]
            else:
                marked[0] = ("-" if is_negative(parts[0]) else "", marked[0][1])
        case Parallel(parts):
            sign = notation.joined(["", ""], "||").strip() + " "
            marked = [("", parts[0])] + [(sign, part) for part in parts[1:]]
        case Product(coefficient, over, under):
            marked = _marked_factors(coefficient, over, under)
            if not marked:
                return [whole]
        case _:
            return [whole]
    found: list[str] = []
    outer = _piece(expression, notation).binding
    for sign, part in marked:
        needed = _PRODUCT if isinstance(expression, Product) else _PARALLEL if sign.endswith("- ") else outer
        loose = _piece(part, notation).binding < needed
        inner = width - len(sign) - 2 * loose
        first, *rest = _broken(part, notation, max(inner, 20))
        indent = " " * (len(sign) + loose)
        block = [sign + "(" * loose + first, *(indent + line for line in rest)]
        block[-1] += ")" * loose
        found += block
    return found


def _marked_factors(
    coefficient: Fraction, over: tuple[Expression, ...], under: tuple[Expression, ...]
) -> list[tuple[str, Expression]]:
    """The factors of a product, each with its operator: what is no sum on the first line, if there are sums."""
    plain, sums = (
        [[factor for factor in side if is_sum(factor) is wanted] for side in (over, under)] for wanted in (False, True)
    )
    if not any(sums):
        if any(isinstance(f, Quantity) and f.kind in ("capacitor", "inductor") for f in (*over, *under)):
            return []  # s does not stand beside the element it belongs to
        plain, sums = [[], []], plain
        if len(sums[0]) + len(sums[1]) < 2:
            return []
    head = product(plain[0], plain[1], coefficient)
    marked = [("* ", factor) for factor in sums[0]] + [("/ ", factor) for factor in sums[1]]
    if head == Number(Fraction(1)) and sums[0]:
        return [("", sums[0][0]), *marked[1:]]
    return [("", head), *marked]


def _text_notation(times: str, parallel: str) -> Notation:
    def fraction(over: Sequence[Piece], under: Sequence[Piece]) -> Piece:
        below = under[0].shown if len(under) == 1 else f"({multiplied(under)})"
        return Piece(f"{multiplied(over)}/{below}", _PRODUCT)

    def multiplied(factors: Sequence[Piece]) -> str:
        shown = factors[0].shown
        for factor in factors[1:]:
            touching = times == " " and shown.endswith(")") and factor.shown.startswith("(")
            shown += ("" if touching else times) + factor.shown
        return shown

    def joined(pieces: Sequence[str], operator: str) -> str:
        if len(pieces) == 1:
            return f"{operator}{pieces[0]}"
        return f" {parallel if operator == '||' else operator} ".join(pieces)

    return Notation(
        number=str,
        name=str,
        frequency=lambda power: "s" if power == 1 else f"s^{power}",
        grouped=lambda shown: f"({shown})",
        joined=joined,
        times=multiplied,
        fraction=fraction,
    )


ASCII = _text_notation(" ", "||")
UNICODE = _text_notation("·", "∥")


def _name_parts(name: str) -> tuple[str, str]:
    """Main letters and index of a name: `r_source_n` is r with the index `source,n`.

    >>> _name_parts("r1"), _name_parts("r_id_u2"), _name_parts("u1.r_o"), _name_parts("load")
    (('r', '1'), ('r', 'id,u2'), ('r', 'o,u1'), ('load', ''))
    """
    owner, _, own = name.rpartition(".")
    found = re.fullmatch(r"([A-Za-z]+)(.*)", own)
    main, rest = (found.group(1), found.group(2)) if found else (own, "")
    index = [part for part in [*rest.split("_"), owner] if part]
    return main, ",".join(index)


def _latex_name(name: str) -> str:
    main, index = _name_parts(name)
    shown = main if len(main) == 1 else rf"\mathit{{{main}}}"
    if not index:
        return shown
    subscript = index if index.isdigit() else rf"\mathrm{{{index}}}"
    return f"{shown}_{{{subscript}}}"


def _latex_fraction(over: Sequence[Piece], under: Sequence[Piece]) -> Piece:
    above, below = (_ungrouped(side, _latex_times, r"\left(", r"\right)") for side in (over, under))
    return Piece(rf"\frac{{{above}}}{{{below}}}", _ATOM)


def _ungrouped(factors: Sequence[Piece], times: Callable[[Sequence[Piece]], str], left: str, right: str) -> str:
    """The product, the parentheses around its only factor taken off."""
    shown = times(factors)
    inner = shown.removeprefix(left).removesuffix(right)
    return inner if len(factors) == 1 and len(shown) - len(inner) == len(left) + len(right) else shown


def _latex_times(factors: Sequence[Piece]) -> str:
    return r" \, ".join(factor.shown for factor in factors)


def _latex_joined(pieces: Sequence[str], operator: str) -> str:
    if len(pieces) == 1:
        return f"{operator}{pieces[0]}"
    sign = r"\parallel" if operator == "||" else operator
    return f" {sign} ".join(pieces)


LATEX = Notation(
    number=str,
    name=_latex_name,
    frequency=lambda power: "s" if power == 1 else f"s^{{{power}}}",
    grouped=lambda shown: rf"\left({shown}\right)",
    joined=_latex_joined,
    times=_latex_times,
    fraction=_latex_fraction,
)


def _mathml_name(name: str) -> str:
    main, index = (escape(part) for part in _name_parts(name))
    if not index:
        return f"<mi>{main}</mi>"
    kind = "mn" if index.isdigit() else "mtext"
    return f"<msub><mi>{main}</mi><{kind}>{index}</{kind}></msub>"


def _mathml_joined(pieces: Sequence[str], operator: str) -> str:
    sign = {"+": "<mo>+</mo>", "-": "<mo>&#x2212;</mo>", "||": "<mo>&#x2225;</mo>"}[operator]
    return sign + pieces[0] if len(pieces) == 1 else sign.join(pieces)


def _mathml_times(factors: Iterable[Piece]) -> str:
    return "<mo>&#x2062;</mo>".join(factor.shown for factor in factors)


_OPEN, _CLOSE = "<mrow><mo>(</mo>", "<mo>)</mo></mrow>"


def _mathml_fraction(over: Sequence[Piece], under: Sequence[Piece]) -> Piece:
    above, below = (_ungrouped(side, _mathml_times, _OPEN, _CLOSE) for side in (over, under))
    return Piece(f"<mfrac><mrow>{above}</mrow><mrow>{below}</mrow></mfrac>", _ATOM)


MATHML = Notation(
    number=lambda value: f"<mn>{value}</mn>",
    name=_mathml_name,
    frequency=lambda power: "<mi>s</mi>" if power == 1 else f"<msup><mi>s</mi><mn>{power}</mn></msup>",
    grouped=lambda shown: f"{_OPEN}{shown}{_CLOSE}",
    joined=_mathml_joined,
    times=_mathml_times,
    fraction=_mathml_fraction,
)
