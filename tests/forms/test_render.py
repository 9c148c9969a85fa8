"""Formulas as they are shown: few parentheses, and the right ones, in every notation."""

from __future__ import annotations

import json
import re
from fractions import Fraction
from xml.etree import ElementTree

import pytest

from gainassay.forms.evaluation import ratios, value
from gainassay.forms.expression import (
    ONE,
    Expression,
    Number,
    Quantity,
    parallel,
    product,
    quotient,
    series,
    total,
)
from gainassay.forms.library import library
from gainassay.forms.meaningful import derive
from gainassay.forms.render import expression_of, latex, lines, mathml, text, tree

R1, R2, R3, R4 = (Quantity(i, f"r{i + 1}", "resistor", reciprocal=True) for i in range(4))
C1 = Quantity(4, "c1", "capacitor", reciprocal=True)
L1 = Quantity(5, "l1", "inductor", reciprocal=True)
A = Quantity(6, "A", "open_loop_gain", reciprocal=True)

FORMULAS: dict[str, Expression] = {
    "r1 + r2 || r3": series([parallel([R2, R3]), R1]),
    "r1 || (r2 + r3)": parallel([series([R2, R3]), R1]),
    "r1/(r2 || r3)": quotient(R1, parallel([R2, R3])),
    "(r1 + r2)/r3": quotient(series([R1, R2]), R3),
    "r3 || r1 r2/r4": parallel([product([R1, R2], [R4]), R3]),
    "(r2/r1)(1 + r3/r4)": product([R2, total([ONE, quotient(R3, R4)])], [R1]),
    "r2 (1 + r3/r4)": product([R2, total([ONE, quotient(R3, R4)])]),
    "r2/(r1 (1 + r3/r4))": product([R2], [R1, total([ONE, quotient(R3, R4)])]),
    "1/(1 + r1/r2)": quotient(ONE, total([ONE, quotient(R1, R2)])),
    "-r2/r1": product([R2], [R1], -1),
    "1 - r2/(A r1)": total([ONE, product([R2], [R1, A], -1)]),
    "r2/r1 - 1": total([Number(Fraction(-1)), quotient(R2, R1)]),
    "r1 - r2/2": series([product([R2], coefficient=Fraction(-1, 2)), R1]),
    "r1 || (-r2)": parallel([R1, product([R2], coefficient=-1)]),
    "3 r1/(2 r2)": product([R1], [R2], Fraction(3, 2)),
    "(1/2)(1 + r1/r2)": product([total([ONE, quotient(R1, R2)])], coefficient=Fraction(1, 2)),
    "1/2": Number(Fraction(1, 2)),
    "1/(s c1)": C1,
    "s l1": L1,
    "r1 || 1/(s c1)": parallel([R1, C1]),
    "1 + s c1 r1": total([ONE, quotient(R1, C1)]),
    "s^2 c1 l1": quotient(L1, C1),
    "c1 r1/l1": product([R1], [C1, L1]),
    "(1/A)(1 + r2/r1)": product([total([ONE, quotient(R2, R1)])], [A]),
}

LIBRARY = library()
DERIVED = {name: derive(LIBRARY[name]).gain.whole for name in ("inverting_t", "difference", "non_inverting_source")}


@pytest.mark.parametrize("shown", FORMULAS)
def test_parentheses_stand_where_they_must(shown: str) -> None:
    assert text(FORMULAS[shown]) == shown


@pytest.mark.parametrize("shown", FORMULAS)
def test_text_means_what_the_tree_means(shown: str) -> None:
    values = {"r1": 3.0, "r2": 5.0, "r3": 7.0, "r4": 11.0, "c1": 0.13, "l1": 17.0, "A": 19.0}
    assert _read(shown, values | {"s": 2.0}) == pytest.approx(value(FORMULAS[shown], values, 2.0), rel=1e-12)


@pytest.mark.parametrize("name", DERIVED)
def test_text_of_a_whole_form_means_what_the_tree_means(name: str) -> None:
    elements = {element.name: 7.0 * 3**i for i, element in enumerate(LIBRARY[name].elements)}
    values = elements | {"A": 1e3, "r_id": 5e4, "r_o": 60.0}
    expected = pytest.approx(value(DERIVED[name], values), rel=1e-12)
    assert _read(text(DERIVED[name]), values) == expected
    for width in (20, 40, 60, 80, 200):
        assert _read(" ".join(lines(DERIVED[name], width)), values) == expected


def _read(shown: str, values: dict[str, float]) -> float:
    """Value of a text by its own rules: + and - bind loosest, then ||, then products, with or without a sign."""
    tokens = re.findall(r"\|\||[-+*/()^]|\w+", shown)

    def following() -> str:
        return tokens[0] if tokens else ""

    def added() -> float:
        found = -joined() if following() == "-" and tokens.pop(0) else joined()
        while following() in ("+", "-"):
            found += joined() if tokens.pop(0) == "+" else -joined()
        return found

    def joined() -> float:
        parts = [multiplied()]
        while following() == "||":
            tokens.pop(0)
            parts.append(multiplied())
        return parts[0] if len(parts) == 1 else 1 / sum(1 / part for part in parts)

    def multiplied() -> float:
        found = atom()
        while following() not in ("", "+", "-", "||", ")"):
            operator = tokens.pop(0) if following() in ("*", "/") else "*"
            found = found * atom() if operator == "*" else found / atom()
        return found

    def atom() -> float:
        token = tokens.pop(0)
        if token == "(":
            found = added()
            assert tokens.pop(0) == ")"
        else:
            found = values[token] if token in values else float(token)
        if following() == "^":
            tokens.pop(0)
            found **= int(tokens.pop(0))
        return found

    found = added()
    assert not tokens
    return found


def test_unicode_is_at_hand() -> None:
    assert text(product([R1, total([ONE, quotient(R2, parallel([R3, R4]))])]), unicode=True) == "r1·(1 + r2/(r3 ∥ r4))"


def test_lines_keep_to_the_width() -> None:
    for line in lines(DERIVED["difference"], 80):
        assert len(line) <= 80, line
    assert lines(FORMULAS["r1 + r2 || r3"]) == ["r1 + r2 || r3"]


def test_latex() -> None:
    assert latex(FORMULAS["r1/(r2 || r3)"]) == r"\frac{r_{1}}{r_{2} \parallel r_{3}}"
    assert latex(FORMULAS["(r2/r1)(1 + r3/r4)"]) == r"\frac{r_{2}}{r_{1}} \, \left(1 + \frac{r_{3}}{r_{4}}\right)"
    assert latex(Quantity(0, "r_source_n", "resistor", True)) == r"r_{\mathrm{source,n}}"
    assert latex(Quantity(0, "u1.r_o", "output_resistance", False)) == r"r_{\mathrm{o,u1}}"
    assert latex(FORMULAS["s^2 c1 l1"]) == r"s^{2} \, c_{1} \, l_{1}"


@pytest.mark.parametrize("name", DERIVED)
def test_latex_is_balanced(name: str) -> None:
    shown = latex(DERIVED[name])
    depth = 0
    for character in shown:
        depth += (character == "{") - (character == "}")
        assert depth >= 0
    assert depth == 0
    assert shown.count(r"\left(") == shown.count(r"\right)")
    assert set(re.findall(r"\\([a-z]+|.)", shown)) <= {"frac", "left", "right", "parallel", "mathrm", ","}


@pytest.mark.parametrize("name", DERIVED)
def test_mathml_is_well_formed(name: str) -> None:
    root = ElementTree.fromstring(mathml(DERIVED[name]))
    space = "{http://www.w3.org/1998/Math/MathML}"
    known = {"math", "mrow", "mfrac", "msub", "msup", "mi", "mn", "mo", "mtext"}
    assert {element.tag for element in root.iter()} <= {space + tag for tag in known}
    for fraction in root.iter(space + "mfrac"):
        assert len(fraction) == 2
    assert all(len(element) == 2 for element in root.iter(space + "msub"))


def test_mathml_escapes_names() -> None:
    assert "<mi>&lt;b&gt;</mi>" in mathml(Quantity(0, "<b>", "resistor", True))


@pytest.mark.parametrize("shown", FORMULAS)
def test_tree_survives_json(shown: str) -> None:
    assert expression_of(json.loads(json.dumps(tree(FORMULAS[shown])))) == FORMULAS[shown]


def test_numbers_put_in_show_which_ratio_matters() -> None:
    gain = derive(LIBRARY["inverting"], {"r_source": "short", "r_load": "open"}).gain
    values = {"r1": 1e3, "r2": 1e5, "A": 1e5, "r_id": 1e6, "r_o": 0.0}
    shown = dict(ratios(gain.denominator, values))
    assert shown["(r2 + r_o)/(r1 || r_id)"] == pytest.approx(100.1)
    assert shown["(1/A)(1 + (r2 + r_o)/(r1 || r_id))"] == pytest.approx(1.011e-3)
    assert next(iter(shown)) == text(gain.denominator)


def test_open_and_short_may_be_put_in() -> None:
    gain = derive(LIBRARY["non_inverting"]).gain
    values = {"r1": 1e3, "r2": 1e4, "r_source": 0.0, "r_load": float("inf"), "A": float("inf"), "r_id": 1e6, "r_o": 0.0}
    assert value(gain.whole, values) == 11.0


def test_a_sum_that_is_subtracted_keeps_its_parentheses() -> None:
    ratio = product([R1], [R2])
    formula = total([ratio, product([total([ONE, product([R3], [R4])])], coefficient=-1)])
    assert text(formula) == "r1/r2 - (1 + r3/r4)"
    assert "".join(lines(formula, 12)).replace(" ", "") == "r1/r2-(1+r3/r4)"
    assert r"- \left(1" in latex(formula)
