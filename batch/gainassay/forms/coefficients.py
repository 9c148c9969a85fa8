"""A form's coefficient functions, evaluated for many stages at once.

An element enters as a pair (y, z), its admittance being y/z: a resistor is (1, r), an open circuit (0, 1), a
short circuit (1, 0). Polynomials in admittances are made homogeneous in each pair, so that open, short and
everything between are one case without a division.

At 0 Hz pairs and all that follows from them are real, at a frequency complex.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gainassay.forms.form import Form, Ratio
from gainassay.forms.slopes import Polynomial

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
AnyArray = NDArray[Any]
"""Floats at 0 Hz, complex numbers at a frequency."""


@dataclass(frozen=True)
class Pairs:
    """Elements as pairs (y, z) with admittance y/z.

    Attributes
    ----------
    y, z : ndarray, shape (elements, stages)
        Each pair may be scaled by a factor of its own.
    """

    y: AnyArray
    z: AnyArray


@dataclass(frozen=True)
class Coefficients:
    """A form's coefficient functions at given elements.

    Attributes
    ----------
    gain_ideal : ndarray, shape (stages,)
        G_ideal [gain unit].
    contrasts, loadings : ndarray, shape (terms, stages)
        n_k - d_k and d_k [1/unit of m_k].
    """

    gain_ideal: AnyArray
    contrasts: AnyArray
    loadings: AnyArray


@dataclass(frozen=True)
class Slopes:
    """Derivatives of a form's coefficient functions in the logarithm of each element's impedance.

    Attributes
    ----------
    gain_ideal : ndarray, shape (elements, stages)
        Of the logarithm of G_ideal.
    contrasts, loadings : ndarray, shape (elements, terms, stages)
        Of n_k - d_k and d_k [1/unit of m_k].
    """

    gain_ideal: AnyArray
    contrasts: AnyArray
    loadings: AnyArray


def at_dc(form: Form, values: FloatArray) -> Pairs:
    """Pairs of a form's elements at 0 Hz, where a capacitor is open and an inductor a short.

    Parameters
    ----------
    values : ndarray, shape (elements, stages)
        Resistance [ohm], capacitance [F] or inductance [H]; a resistance of `inf` is an open circuit, of 0 a
        short.

    Returns
    -------
    Pairs
        Scaled by powers of two, so without rounding, to y and z of similar size: products over many elements
        then stay far from overflow.
    """
    kinds = np.array(form.kinds)[:, None]
    return _scaled(np.where(kinds == "capacitor", np.inf, np.where(kinds == "inductor", 0.0, values)))


def far_above(form: Form, values: FloatArray) -> Pairs:
    """Pairs of a form's elements far above all corner frequencies, where a capacitor is a short and an inductor open.

    Of `values` as in `at_dc`; a capacitor that is not there, of 0 F, stays open, and an inductor of 0 H short.
    """
    kinds = np.array(form.kinds)[:, None]
    is_reactive = values > 0.0
    capacitors, inductors = np.where(is_reactive, 0.0, np.inf), np.where(is_reactive, np.inf, 0.0)
    return _scaled(np.where(kinds == "capacitor", capacitors, np.where(kinds == "inductor", inductors, values)))


def at_frequency(form: Form, values: FloatArray, hertz: FloatArray) -> Pairs:
    """Pairs of a form's elements at s = j 2 pi f, scaled as `at_dc` scales them.

    Parameters
    ----------
    values : ndarray, shape (elements, stages)
        Resistance [ohm], capacitance [F] or inductance [H]; 0 and `inf` are what leaves an element out.
    hertz : ndarray, shape (stages,)
        Frequency of each stage [Hz], above 0.
    """
    kinds, omega = np.array(form.kinds)[:, None], 2.0 * np.pi * hertz
    with np.errstate(divide="ignore"):
        reactance = np.where(kinds == "capacitor", 1.0 / (omega * values), omega * values)
    size = _scaled(np.where(kinds == "resistor", values, reactance))
    return Pairs(y=size.y * np.where(kinds == "capacitor", 1j, 1.0), z=size.z * np.where(kinds == "inductor", 1j, 1.0))


def _scaled(ohms: FloatArray) -> Pairs:
    """Pairs of resistances, 0 for a short and inf for an open circuit."""
    is_open = np.isinf(ohms)
    finite = np.where(is_open, 1.0, ohms)
    _, exponent = np.frexp(finite)
    scale = np.where(finite == 0.0, 1.0, np.ldexp(1.0, -(exponent // 2)))
    return Pairs(y=np.where(is_open, 0.0, scale), z=np.where(is_open, 1.0, finite * scale))


def evaluate(form: Form, pairs: Pairs) -> Coefficients:
    """The coefficient functions of a form.

    Where elements make a function infinite or undefined (a short across the output, say) the entry is not
    finite; it is for the caller to refuse it.

    Parameters
    ----------
    form : Form
        The form.
    pairs : Pairs
        The elements, in the order of `form.elements`.
    """
    return Coefficients(gain_ideal(form, pairs), ratios(form.contrasts, pairs), loadings(form, pairs))


def loadings(form: Form, pairs: Pairs) -> AnyArray:
    """The loadings d_k alone [1/unit of m_k], shape (terms, stages)."""
    return ratios(form.loadings, pairs)


def occur(form: Form, pairs: Pairs) -> NDArray[np.bool_]:
    """Which terms occur at all: some product of elements in n_k - d_k or d_k is not 0, even if their sum is.

    Returns
    -------
    ndarray, shape (terms, stages)
    """
    magnitudes = [
        [
            Ratio(tuple((abs(value), exponents) for value, exponents in ratio.numerator), ratio.denominator)
            for ratio in ratios
        ]
        for ratios in (form.contrasts, form.loadings)
    ]
    count = pairs.y.shape[1]
    found = np.zeros((len(form.monomials), count), dtype=bool)
    for ratios in magnitudes:
        for k, ratio in enumerate(ratios):
            found[k] |= _ratio(ratio, pairs) != 0.0
    return found


def is_feedback_positive(form: Form, at: Coefficients) -> NDArray[np.bool_]:
    """Whether a loading of products of 1/A_OL alone is negative, so that the output would run to its limit.

    Shape (stages,).
    """
    return np.asarray(np.logical_or.reduce(at.loadings[list(form.loops())] < 0.0, axis=0))


def gain_ideal(form: Form, pairs: Pairs) -> AnyArray:
    """The ideal gain alone [gain unit], shape (stages,)."""
    return _ratio(form.gain_ideal, pairs)


def slopes(form: Form, pairs: Pairs) -> Slopes:
    """The slopes of a form's coefficient functions, from the derivatives of their polynomials.

    What is open or short has a slope of 0, or of its rounding.
    """

    def table(ratios: tuple[Ratio, ...]) -> AnyArray:
        found = np.empty((len(ratios), *pairs.y.shape), pairs.z.dtype)
        for place, ratio in enumerate(ratios):
            found[place] = _slopes(ratio, pairs)
        return found.swapaxes(0, 1)

    return Slopes(slopes_of_ideal(form, pairs), table(form.contrasts), table(form.loadings))


def slopes_of_ideal(form: Form, pairs: Pairs) -> AnyArray:
    """The slopes of the logarithm of G_ideal alone, shape (elements, stages)."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return over(_slopes(form.gain_ideal, pairs), gain_ideal(form, pairs))


def ratios(of: Sequence[Ratio], pairs: Pairs) -> AnyArray:
    """Ratios at given elements, shape (ratios, stages); not finite where elements make one infinite or undefined."""
    return np.array([_ratio(ratio, pairs) for ratio in of]).reshape(len(of), pairs.y.shape[1])


@dataclass(frozen=True)
class InS:
    """A form's coefficient functions of some stages as ratios of polynomials in s = j 2 pi f.

    Attributes
    ----------
    ratios : tuple of pairs of ndarray
        Numerator and denominator of G_ideal, of the n_k - d_k and of the d_k, each of shape (powers of s, stages).
    """

    ratios: tuple[tuple[FloatArray, FloatArray], ...]

    def at(self, stages: NDArray[np.intp], hertz: FloatArray) -> Coefficients:
        """The coefficient functions of stages at frequencies [Hz], one for one."""
        omega = 2.0 * np.pi * hertz
        with np.errstate(divide="ignore", invalid="ignore"):
            values = np.array(
                [over(*(_at(polynomial[:, stages], omega) for polynomial in ratio)) for ratio in self.ratios]
            )
        count = len(values) // 2
        return Coefficients(values[0], values[1 : 1 + count], values[1 + count :])


def in_s(form: Form, values: FloatArray) -> InS:
    """The coefficient functions of a form in s; `values` as in `at_frequency`."""
    pairs = _at_one_per_second(form, values)
    return InS(tuple(_ratio_in_s(form, ratio, pairs) for ratio in (form.gain_ideal, *form.contrasts, *form.loadings)))


def _at_one_per_second(form: Form, values: FloatArray) -> Pairs:
    """Pairs at s = 1/s; a capacitor's y is proportional to s, and an inductor's z."""
    with np.errstate(divide="ignore"):
        return _scaled(np.where(np.array(form.kinds)[:, None] == "capacitor", 1.0 / values, values))


def _ratio_in_s(form: Form, ratio: Ratio, pairs: Pairs) -> tuple[FloatArray, FloatArray]:
    return _in_s(form, ratio.numerator, ratio, pairs), _in_s(form, ratio.denominator, ratio, pairs)


def _in_s(form: Form, polynomial: Polynomial, ratio: Ratio, pairs: Pairs) -> FloatArray:
    """The coefficients of the powers of s."""
    powers, degrees = _all_powers(ratio, pairs), ratio.degrees()
    most = sum(degree for degree, kind in zip(degrees, form.kinds, strict=True) if kind != "resistor")
    found = np.zeros((most + 1, pairs.y.shape[1]))
    for product, exponents in _products(polynomial, powers, pairs.y.shape[1]):
        each = zip(form.kinds, exponents, degrees, strict=True)
        found[sum(_power_of_s(kind, exponent, degree) for kind, exponent, degree in each)] += product
    return found


def _power_of_s(kind: str, exponent: int, degree: int) -> int:
    return exponent if kind == "capacitor" else degree - exponent if kind == "inductor" else 0


def _at(polynomial: FloatArray, omega: FloatArray) -> ComplexArray:
    """A polynomial in s at s = j omega: even powers are real, odd ones imaginary, signs turning by twos."""
    found = np.zeros(omega.shape, np.complex128)
    square = -omega * omega
    for part, first in ((found.real, 0), (found.imag, 1)):
        for coefficient in polynomial[first::2][::-1]:
            part *= square
            part += coefficient
    found.imag *= omega
    return found


def natural_frequencies(form: Form, values: FloatArray) -> FloatArray:
    """Where the ideal gain of one stage may change abruptly [Hz]: at |s|/(2 pi) of its poles and zeros s, and around.

    The sharper a resonance, the smaller is |Re s|, by multiples of which the points around it are apart.

    Parameters
    ----------
    values : ndarray, shape (elements,)
        As in `at_frequency`.
    """
    of_ideal = _ratio_in_s(form, form.gain_ideal, _at_one_per_second(form, values[:, None]))
    roots = np.concatenate([np.roots(polynomial[::-1, 0]) for polynomial in of_ideal])
    steps = np.array([-4.0, -2.0, -1.0, -0.5, 0.0, 0.5, 1.0, 2.0, 4.0])
    hertz = (np.abs(roots)[:, None] + np.abs(roots.real)[:, None] * steps) / (2.0 * np.pi)
    return np.unique(hertz[hertz > 0.0])


def times(one: AnyArray, other: AnyArray) -> AnyArray:
    """The product of arrays, real or complex.

    A library's complex product may round differently by the place of a number in the array; this one does not.
    """
    if not (np.iscomplexobj(one) and np.iscomplexobj(other)):
        return np.asarray(one * other)
    found = np.empty(np.broadcast_shapes(one.shape, other.shape), np.complex128)
    np.subtract(one.real * other.real, one.imag * other.imag, out=found.real)
    np.add(one.real * other.imag, one.imag * other.real, out=found.imag)
    return found


def over(one: AnyArray, other: AnyArray) -> AnyArray:
    """The quotient of arrays, as `times` gives products."""
    if not np.iscomplexobj(other):
        return np.asarray(one / other)
    # Scaled by a power of two, so without rounding: squares then stay far from overflow.
    _, exponent = np.frexp(np.maximum(np.abs(other.real), np.abs(other.imag)))
    scale = np.ldexp(1.0, -exponent)
    real, imag = other.real * scale, other.imag * scale
    conjugate = np.empty(other.shape, np.complex128)
    conjugate.real, conjugate.imag = real, -imag
    found, square = times(one, conjugate), (real * real + imag * imag) / scale
    found = found.astype(np.complex128)
    np.divide(found.real, square, out=found.real)
    np.divide(found.imag, square, out=found.imag)
    return found


def _ratio(ratio: Ratio, pairs: Pairs) -> AnyArray:
    powers = _all_powers(ratio, pairs)
    count = pairs.y.shape[1]
    with np.errstate(divide="ignore", invalid="ignore"):
        return over(_polynomial(ratio.numerator, powers, count), _polynomial(ratio.denominator, powers, count))


def _slopes(ratio: Ratio, pairs: Pairs) -> AnyArray:
    """z d/dz of N/D = (z N' - (N/D) z D')/D for each element's z; shape (elements, stages)."""
    powers = _all_powers(ratio, pairs)
    (numerator, rises), (denominator, falls) = (
        _with_slopes(polynomial, powers, pairs.y.shape) for polynomial in (ratio.numerator, ratio.denominator)
    )
    with np.errstate(divide="ignore", invalid="ignore"):
        return over(rises - times(over(numerator, denominator), falls), denominator)


def _all_powers(ratio: Ratio, pairs: Pairs) -> list[list[AnyArray]]:
    return [_powers(y, z, degree) for y, z, degree in zip(pairs.y, pairs.z, ratio.degrees(), strict=True)]


def _powers(y: AnyArray, z: AnyArray, degree: int) -> list[AnyArray]:
    """y**e * z**(degree - e) for e from 0 to degree, by multiplication: pow() may differ between machines."""
    powers = [np.ones_like(y)]
    for step in range(degree):
        powers = [times(powers[0], z), *(times(power, y) for power in powers)] if step else [z, y]
    return powers


def _polynomial(polynomial: Polynomial, powers: list[list[AnyArray]], count: int) -> AnyArray:
    # One monomial after the other: a fixed order of summation, whatever the number of stages.
    total = np.zeros(count, powers[0][0].dtype)
    for product, _ in _products(polynomial, powers, count):
        total += product
    return total


def _with_slopes(
    polynomial: Polynomial, powers: list[list[AnyArray]], shape: tuple[int, ...]
) -> tuple[AnyArray, AnyArray]:
    """The polynomial and its z d/dz for each element's z; shapes (stages,) and (elements, stages)."""
    total, slopes = np.zeros(shape[1], powers[0][0].dtype), np.zeros(shape, powers[0][0].dtype)
    for product, exponents in _products(polynomial, powers, shape[1]):
        total += product
        for slope, table, exponent in zip(slopes, powers, exponents, strict=True):
            power = len(table) - 1 - exponent
            if power:
                slope += power * product
    return total, slopes


def _products(
    polynomial: Polynomial, powers: list[list[AnyArray]], count: int
) -> Iterator[tuple[AnyArray, tuple[int, ...]]]:
    """Each monomial with its coefficient, and its exponents."""
    for coefficient, exponents in polynomial:
        product = np.full(count, float(coefficient), powers[0][0].dtype)
        for table, exponent in zip(powers, exponents, strict=True):
            if len(table) > 1:
                product = times(product, table[exponent])
        yield product, exponents
