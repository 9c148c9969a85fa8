"""A form as text: ideal gain, the products of departures, and their coefficient functions in resistances."""

from __future__ import annotations

from gainassay.forms.form import Form, Ratio
from gainassay.forms.topology import Topology, gain_unit

SHOWN = {"a": "1/A", "g_id": "1/r_id", "r_o": "r_o"}
"""How a departure is written."""


def text(topology: Topology, form: Form) -> list[str]:
    """Lines that state the gain, each coefficient function on a line of its own."""
    several = len(topology.amplifiers) > 1
    lines = [
        f"{topology.name}: {topology.summary}",
        "",
        f"gain = G (1 + sum n m) / (1 + sum d m)   [{gain_unit(topology)}]",
        "error = sum (n - d) m / (1 + sum d m)",
        "",
        f"G = {_ratio(form.gain_ideal, form)}",
    ]
    for monomial, term, contrast, loading in zip(
        form.monomials, form.terms, form.contrasts, form.loadings, strict=True
    ):
        product = " ".join(_departure(*form.departures[index], several) for index in monomial)
        lines += [
            "",
            f"{term}: m = {product}",
            f"  n - d = {_ratio(contrast, form)}",
            f"  d     = {_ratio(loading, form)}",
        ]
    return lines


def _departure(amplifier: str, symbol: str, several: bool) -> str:
    shown = SHOWN[symbol]
    if not several:
        return shown
    stem, _, divisor = shown.rpartition("/")
    return f"{stem}/{divisor}.{amplifier}" if stem else f"{shown}.{amplifier}"


def _ratio(ratio: Ratio, form: Form) -> str:
    degrees = ratio.degrees()
    numerator = _polynomial(ratio.numerator, degrees, form.elements)
    denominator = _polynomial(ratio.denominator, degrees, form.elements)
    if denominator == "1":
        return numerator
    return f"{_grouped(numerator)} / {_grouped(denominator, product=True)}"


def _grouped(text: str, product: bool = False) -> str:
    inner = text[1:] if text.startswith("-") else text
    is_sum = " + " in inner or " - " in inner
    return f"({text})" if is_sum or (product and " " in text) else text


def _polynomial(
    terms: tuple[tuple[int, tuple[int, ...]], ...], degrees: tuple[int, ...], elements: tuple[str, ...]
) -> str:
    """A polynomial in admittances, times the product of all resistances to the power of `degrees`."""
    shown = ""
    for coefficient, exponents in terms:
        factors = [
            element if power == 1 else f"{element}^{power}"
            for element, exponent, degree in zip(elements, exponents, degrees, strict=True)
            if (power := degree - exponent)
        ]
        if abs(coefficient) != 1 or not factors:
            factors.insert(0, str(abs(coefficient)))
        sign = "-" if coefficient < 0 else "+"
        product = " ".join(factors)
        shown += f" {sign} {product}" if shown else (f"-{product}" if coefficient < 0 else product)
    return shown or "0"
