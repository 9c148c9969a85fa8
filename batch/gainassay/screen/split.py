"""Complex numbers as real and imaginary parts.

A library's complex product may round differently by the place of a number in an array, and a verdict must not; and much
of what meets at a frequency is real.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from gainassay.forms.coefficients import AnyArray, ComplexArray, FloatArray


@dataclass(frozen=True)
class Split:
    """Complex numbers; `imag` is None where all are real, `real` where all are imaginary."""

    real: FloatArray | None
    imag: FloatArray | None

    def whole(self) -> tuple[FloatArray, FloatArray]:
        """Real and imaginary part, 0 where there is none."""
        zero = np.zeros((1, 1))
        return zero if self.real is None else self.real, zero if self.imag is None else self.imag


ONE = Split(np.ones((1, 1)), None)


def split(numbers: AnyArray) -> Split:
    """Numbers as real and imaginary parts."""
    real, imag = (np.ascontiguousarray(part) if part.any() else None for part in (numbers.real, numbers.imag))
    return Split(real, imag)


def times(one: Split, other: Split) -> Split:
    """The product."""
    return Split(real_product(one, other), _sum(_product(one.real, other.imag), _product(one.imag, other.real)))


def over(one: Split, other: Split) -> Split:
    """The quotient."""
    real, imag = other.whole()
    square = real * real + imag * imag
    return times(one, Split(real / square, -imag / square))


def plus(one: Split | None, other: Split) -> Split:
    """The sum."""
    return other if one is None else Split(_sum(one.real, other.real), _sum(one.imag, other.imag))


def real_product(one: Split, other: Split) -> FloatArray | None:
    """The real part of the product; None: 0."""
    return _difference(_product(one.real, other.real), _product(one.imag, other.imag))


def _product(one: FloatArray | None, other: FloatArray | None) -> FloatArray | None:
    return None if one is None or other is None else one * other


def _sum(one: FloatArray | None, other: FloatArray | None) -> FloatArray | None:
    return other if one is None else one if other is None else one + other


def _difference(one: FloatArray | None, other: FloatArray | None) -> FloatArray | None:
    return one if other is None else -other if one is None else one - other


def splits(numbers: ComplexArray) -> list[Split]:
    """Numbers along the first axis, each as real and imaginary parts."""
    return [split(of) for of in numbers]
