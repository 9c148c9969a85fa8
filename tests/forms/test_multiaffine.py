"""Arithmetic of multi-affine polynomials and their determinants."""

from __future__ import annotations

from hypothesis import given, settings
from hypothesis import strategies as st
from sympy import Matrix, Poly, symbols

from gainassay.forms.multiaffine import MultiAffine, determinant, factors

X = symbols("x0:6")
polynomials = st.dictionaries(st.integers(0, 63), st.integers(-5, 5).filter(bool), max_size=6).map(MultiAffine)


def as_sympy(polynomial: MultiAffine) -> Poly:
    total = Poly(0, *X)
    for mask, value in polynomial:
        term = Poly(value, *X)
        for index, x in enumerate(X):
            if mask >> index & 1:
                term *= Poly(x, *X)
        total += term
    return total


@given(polynomials, polynomials)
def test_sum_and_difference_are_those_of_polynomials(left: MultiAffine, right: MultiAffine) -> None:
    assert as_sympy(left + right) == as_sympy(left) + as_sympy(right)
    assert as_sympy(left - right) == as_sympy(left) - as_sympy(right)


@given(polynomials, polynomials)
def test_product_drops_squares_and_nothing_else(left: MultiAffine, right: MultiAffine) -> None:
    whole = as_sympy(left) * as_sympy(right)
    kept = {powers: value for powers, value in whole.as_dict().items() if max(powers) <= 1}
    assert as_sympy(left.times(right)).as_dict() == kept


@given(polynomials, st.integers(0, 63))
def test_collected_parts_make_up_the_whole(polynomial: MultiAffine, chosen: int) -> None:
    parts = polynomial.collect(chosen)
    rebuilt = MultiAffine({})
    for product, part in parts.items():
        assert not product & ~chosen
        assert not part.support() & chosen
        rebuilt += part.times(MultiAffine({product: 1}))
    assert rebuilt == polynomial


@given(st.lists(st.tuples(st.integers(0, 3), st.integers(0, 3)), min_size=3, max_size=6))
def test_determinant_of_a_network_is_that_of_its_matrix(branches: list[tuple[int, int]]) -> None:
    """Branches of admittance x_i between nodes 1 to 3 and ground: each symbol has rank one."""
    rows: list[dict[int, MultiAffine]] = [{} for _ in range(3)]
    matrix = Matrix.zeros(3, 3)
    for index, (first, second) in enumerate(branches):
        for here, there in ((first, second), (second, first)):
            if here == 0 or first == second:
                continue
            for node, sign in ((here, 1), (there, -1)):
                if node:
                    entry = MultiAffine({1 << index: sign})
                    rows[here - 1][node] = rows[here - 1].get(node, MultiAffine({})) + entry
                    matrix[here - 1, node - 1] += sign * X[index]
    assert as_sympy(determinant(rows, [1, 2, 3])) == Poly(matrix.det(), *X)


def test_order_of_columns_decides_the_sign() -> None:
    a, b = MultiAffine.symbol(0), MultiAffine.symbol(1)
    rows = [{0: a}, {1: b}]
    assert determinant(rows, [0, 1]) == -determinant(rows, [1, 0])


PAIRS = [
    st.dictionaries(st.sampled_from([0, 1 << i, 2 << i, 3 << i]), st.integers(-5, 5).filter(bool)) for i in (0, 2, 4)
]


@settings(max_examples=40, deadline=None)
@given(st.tuples(*PAIRS))
def test_factors_are_those_of_polynomials(terms: tuple[dict[int, int], ...]) -> None:
    whole = MultiAffine.constant(1)
    for factor_terms in terms:
        whole = whole.times(MultiAffine(factor_terms))
    content, found = factors(whole)
    again = MultiAffine.constant(content)
    for factor in found:
        again = again.times(factor)
    assert again == whole
    if whole:
        assert len(found) == sum(power for _, power in as_sympy(whole).factor_list()[1])


@settings(max_examples=40, deadline=None)
@given(polynomials.filter(bool))
def test_a_polynomial_of_any_shape_is_factored(polynomial: MultiAffine) -> None:
    _, found = factors(polynomial)
    assert len(found) == sum(power for _, power in as_sympy(polynomial).factor_list()[1])
    assert all(first.support() & second.support() == 0 for first in found for second in found if first is not second)


@given(polynomials, st.integers(0, 63))
def test_inverting_symbols_twice_changes_nothing(polynomial: MultiAffine, chosen: int) -> None:
    assert polynomial.inverted(chosen).inverted(chosen) == polynomial


@given(polynomials, st.integers(0, 5))
def test_a_polynomial_is_split_at_a_symbol(polynomial: MultiAffine, index: int) -> None:
    rest, lead = polynomial.split(1 << index)
    assert rest + lead.times(MultiAffine.symbol(index)) == polynomial
