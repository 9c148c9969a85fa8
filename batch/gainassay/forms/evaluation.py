"""Numbers put into a formula: its value, and the value of every ratio in it."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np

from gainassay.forms.expression import (
    Expression,
    Number,
    Parallel,
    Product,
    Quantity,
    Series,
    Sum,
    children,
)
from gainassay.forms.render import text


def value(expression: Expression, values: Mapping[str, Any], s: Any = None) -> Any:
    """Value of a formula.

    Parameters
    ----------
    values : Mapping[str, Any]
        By name: resistances [ohm], capacitances [F], inductances [H], open-loop gains [V/V]; floats, or any
        numbers or arrays that can be added, multiplied and divided. 0 and infinity stand for what is short and open.
    s : Any
        Complex frequency [rad/s]; None is 0 Hz.

    Raises
    ------
    KeyError
        If a quantity has no value.
    ZeroDivisionError
        If the formula divides by zero.
    """
    found: Any
    match expression:
        case Number(number):
            return number.numerator if number.denominator == 1 else number.numerator / number.denominator
        case Quantity(_, name, "capacitor", _):
            return np.inf if s is None else 1 / (s * values[name])
        case Quantity(_, name, "inductor", _):
            return 0 if s is None else s * values[name]
        case Quantity(_, name, _, _):
            return values[name]
        case Sum((Number(number), *rest)) if number.denominator != 1:
            # Not as a binary fraction: the values may have more digits than a float.
            found = sum(value(part, values, s) for part in rest)
            return (found * number.denominator + number.numerator) / number.denominator
        case Series(parts) | Sum(parts):
            return sum(value(part, values, s) for part in parts)
        case Parallel(parts):
            impedances = [value(part, values, s) for part in parts]
            if any(np.ndim(impedance) == 0 and impedance == 0 for impedance in impedances):
                return np.float64(0.0)
            return 1 / sum(1 / impedance for impedance in impedances)
        case Product(coefficient, over, under):
            found = coefficient.numerator
            for factor in over:
                found = found * value(factor, values, s)
            for factor in under:
                found = found / value(factor, values, s)
            return found / coefficient.denominator if coefficient.denominator != 1 else found


def ratios(
    expression: Expression, values: Mapping[str, Any], s: Any = None, unicode: bool = False
) -> list[tuple[str, Any]]:
    """The formula and each ratio in it that is compared with something, as text, with its value.

    So a person sees which ratio matters. Outer ratios stand before those inside them, none twice.
    """
    found = {expression: None} | dict.fromkeys(_compared(expression))
    return [(text(part, unicode), value(part, values, s)) for part in found]


def _compared(expression: Expression) -> Iterator[Expression]:
    if isinstance(expression, Sum):
        yield from (addend for addend in expression.addends if not isinstance(addend, Number))
    for child in children(expression):
        yield from _compared(child)
