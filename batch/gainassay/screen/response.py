"""The departures of parts at a frequency, and polynomials in them.

At s = j 2 pi f a departure is x + j f y, x being what it is at 0 Hz and y what rises: 1/A = 1/A_OL + j f/GBW, an input
admittance 1/r + j f 2 pi c. A second pole of the open-loop gain makes 1/A (x + j f y)(1 + j f/f_2), and a common-mode
rejection that falls 1/CMRR likewise. The products m_k, and with them the form, are as at 0 Hz. x and y are the
variables of a pair's box, each between 0 and its limit.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache, reduce
from itertools import product

import numpy as np
from numpy.typing import NDArray

from gainassay.forms.coefficients import ComplexArray, FloatArray
from gainassay.forms.departures import (
    COMMON_MODE_REJECTION,
    DEPARTURES,
    FIGURES,
    OPEN_LOOP_GAIN,
    PLACE,
    RISING,
    Departure,
    term_name,
)
from gainassay.forms.form import Form
from gainassay.screen.split import ONE, Split, plus, split, splits, times

LAGGING = {
    symbol: len(FIGURES) + number
    for number, departure in enumerate((OPEN_LOOP_GAIN, COMMON_MODE_REJECTION))
    for symbol in departure.symbols
}
"""Places, behind the figures of a part, of 1/f of what makes a departure rise altogether: the open-loop gain's second
pole, and where the common-mode rejection begins to fall."""

ROWS = len(FIGURES) + 2
"""Figures and these."""


@dataclass(frozen=True)
class Variable:
    """A figure of the part, as one of the form's departures has it.

    Attributes
    ----------
    departure : int
        Place among the form's.
    place : int
        Of the figure in `FIGURES`.
    """

    departure: int
    place: int


def variables(form: Form) -> tuple[Variable, ...]:
    """The figures of a part in each amplifier: those of the form's departures, then what rises of them."""
    return _variables(form.departures)


@cache
def _variables(departures: tuple[tuple[str, str], ...]) -> tuple[Variable, ...]:
    own = tuple(Variable(i, PLACE[symbol]) for i, (_, symbol) in enumerate(departures))
    rising = ((i, RISING[symbol]) for i, (_, symbol) in enumerate(departures) if symbol in RISING)
    return (*own, *(Variable(i, FIGURES.index(figure)) for i, figure in rising))


def figures(form: Form) -> tuple[tuple[int, ...], ...]:
    """As `Form.figures`, of the variables."""
    return (*form.figures(), *((i,) for i in range(len(form.departures), len(variables(form)))))


def every(form: Form) -> int:
    """The corner of the part at which all variables are at their limits."""
    return (1 << len(variables(form))) - 1


@cache
def _rising(departures: tuple[tuple[str, str], ...]) -> dict[int, int]:
    """For each of a form's departures that rises, the place of what does among the variables."""
    found = [place for place, (_, symbol) in enumerate(departures) if symbol in RISING]
    return {place: len(departures) + number for number, place in enumerate(found)}


IN_PHASE, RISES, WHOLE = range(3)
"""What a factor of an addend takes of a departure x + j f y."""


@dataclass(frozen=True)
class Addend:
    """Part of a product m_k.

    Attributes
    ----------
    product : int
        k.
    factors : tuple[tuple[int, int], ...]
        Each one of the form's departures and what of it is taken.
    """

    product: int
    factors: tuple[tuple[int, int], ...]


@dataclass(frozen=True)
class Term:
    """A term of the account, of departures."""

    name: str
    addends: tuple[Addend, ...]


def terms(form: Form) -> tuple[Term, ...]:
    """The terms of the departures.

    What rises of a departure is told from what does not, but for 1/A beside other departures of its amplifier: there
    open-loop gain and bandwidth are understood.
    """
    return _terms(form.departures, form.monomials)


@cache
def _terms(departures: tuple[tuple[str, str], ...], monomials: tuple[tuple[int, ...], ...]) -> tuple[Term, ...]:
    several = len({amplifier for amplifier, _ in departures}) > 1
    found: dict[str, list[Addend]] = {}
    for k, monomial in enumerate(monomials):
        for taken in product(*(_taken(departures, monomial, i) for i in monomial)):
            factors = tuple(zip(monomial, taken, strict=True))
            named = [(departures[i][0], _figure(departures[i][1], part)) for i, part in factors]
            outermost = tuple(sorted(factors, key=lambda factor: _rank(departures, factor[0])))
            found.setdefault(term_name(named, several), []).append(Addend(k, outermost))
    return tuple(Term(name, tuple(own)) for name, own in found.items())


def _figure(symbol: str, part: int) -> Departure:
    return RISING[symbol] if part == RISES else DEPARTURES[PLACE[symbol]]


def _rank(departures: tuple[tuple[str, str], ...], i: int) -> tuple[int, int]:
    """What is mostly complex comes first, so that few sums or products are multiplied by it."""
    symbol = departures[i][1]
    return (0 if symbol in OPEN_LOOP_GAIN.symbols else 1 if symbol in RISING else 2, i)


def _taken(departures: tuple[tuple[str, str], ...], monomial: tuple[int, ...], i: int) -> tuple[int, ...]:
    """What addends take, one after the other, of a departure in a product."""
    amplifier, symbol = departures[i]
    burdened = any(departures[other][0] == amplifier for other in monomial if other != i)
    if symbol not in RISING or (symbol in OPEN_LOOP_GAIN.symbols and burdened):
        return (WHOLE,)
    return (IN_PHASE, RISES)


# Departures of pairs


class Departing:
    """The departures of some parts at the frequencies of some stages.

    Parameters
    ----------
    figures : ndarray, shape (ROWS, parts)
        Those of `FIGURES`, then those of `LAGGING`.
    hertz : ndarray, shape (stages, 1) or (stages, parts)
    """

    def __init__(self, form: Form, figures: FloatArray, hertz: FloatArray) -> None:
        self._form, self._figures, self._hertz = form, figures, hertz
        self._found: dict[tuple[str, bool, bool], Split | None] = {}

    def at(self, ends: int) -> list[Split | None]:
        """Each of the form's departures at a corner; None: ideal.

        Bit i of `ends` says whether variable i is at its limit.
        """
        rising = _rising(self._form.departures)
        return [
            self._departure(symbol, bool(ends >> i & 1), i in rising and bool(ends >> rising[i] & 1))
            for i, (_, symbol) in enumerate(self._form.departures)
        ]

    def taken(self, ends: int, i: int, part: int) -> Split | None:
        """What an addend takes of one of the form's departures at a corner."""
        rising, symbol = _rising(self._form.departures), self._form.departures[i][1]
        is_there, rises = bool(ends >> i & 1), i in rising and bool(ends >> rising[i] & 1)
        return self._departure(symbol, is_there and part != RISES, rises and part != IN_PHASE)

    def _departure(self, symbol: str, is_there: bool, rises: bool) -> Split | None:
        key = symbol, is_there, rises
        if key not in self._found:
            real = self._row(PLACE[symbol]) if is_there else None
            rising = self._row(FIGURES.index(RISING[symbol])) if rises else None
            found = Split(real, None if rising is None else self._hertz * rising)
            lag = self._row(LAGGING[symbol]) if symbol in LAGGING else None
            if lag is not None:
                found = times(found, Split(ONE.real, self._hertz * lag))
            self._found[key] = None if real is None and rising is None else found
        return self._found[key]

    def _row(self, place: int) -> FloatArray | None:
        """A figure of the parts, beside the stages; None: it is 0 for all."""
        row = self._figures[place][None]
        return row if row.any() else None


@dataclass(frozen=True)
class _Nested:
    """Some of a form's products m_k, nested: that of `place`, and for each departure those that it is a factor of."""

    place: int | None
    branches: tuple[tuple[int, _Nested], ...]


@cache
def _nested(departures: tuple[tuple[str, str], ...], monomials: tuple[tuple[int, ...], ...]) -> _Nested:
    def nest(products: Sequence[tuple[int, tuple[int, ...]]]) -> _Nested:
        place = next((k for k, factors in products if not factors), None)
        first = dict.fromkeys(factors[0] for _, factors in products if factors)
        return _Nested(
            place,
            tuple((i, nest([(k, factors[1:]) for k, factors in products if factors[:1] == (i,)])) for i in first),
        )

    return nest(
        [(k, tuple(sorted(monomial, key=lambda i: _rank(departures, i)))) for k, monomial in enumerate(monomials)]
    )


def polynomial(form: Form, coefficients: Sequence[Split], departures: Sequence[Split | None]) -> Split | None:
    """sum_k c_k m_k of pairs, from the c_k of stages and the departures of parts; None: 0 for all."""

    def value(of: _Nested) -> Split | None:
        total = None if of.place is None else coefficients[of.place]
        for i, inner in of.branches:
            factor = departures[i]
            found = None if factor is None else value(inner)
            if factor is not None and found is not None:
                total = plus(total, times(factor, found))
        return total

    return value(_nested(form.departures, form.monomials))


def products(form: Form, figures: FloatArray, hertz: FloatArray) -> ComplexArray:
    """The products m_k of some parts at the frequencies of some stages; shape (terms, parts, stages).

    Parameters
    ----------
    figures : ndarray, shape (variables, parts)
        As `variables` has them; no second pole.
    """
    rising = _rising(form.departures)
    departures = [
        Split(figures[i][:, None], figures[rising[i]][:, None] * hertz if i in rising else None)
        for i in range(len(form.departures))
    ]
    found = np.empty((len(form.monomials), figures.shape[1], len(hertz)), np.complex128)
    for product_k, monomial in zip(found, form.monomials, strict=True):
        product_k.real, product_k.imag = reduce(times, (departures[i] for i in monomial)).whole()
    return found


def figures_of(form: Form, of_part: FloatArray) -> FloatArray:
    """Figures of parts, in the order of `FIGURES`, handed to each amplifier's variables."""
    return of_part[[variable.place for variable in variables(form)]]


def mattering(form: Form, used: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Which of `FIGURES` matter to stages, from the products that occur in them; shapes (terms, stages)."""
    found = np.zeros((len(FIGURES), used.shape[1]), dtype=bool)
    for variable in variables(form):
        for k, monomial in enumerate(form.monomials):
            if variable.departure in monomial:
                found[variable.place] |= used[k]
    return found


# Stages and parts together


@dataclass(frozen=True)
class Meeting:
    """Stages where they meet parts; arrays whose last two axes broadcast against (stages, parts).

    Attributes
    ----------
    set_point, error, rises, contrasts, loadings, terms : ndarray
        As `set_point` and `corner_error` to `corner_terms` of a `spots.SpotSide`.
    """

    set_point: FloatArray
    error: ComplexArray
    rises: ComplexArray
    contrasts: ComplexArray
    loadings: ComplexArray
    terms: ComplexArray


def turned(numerator: Split | None, denominator: Split | None, e: Split) -> tuple[FloatArray, FloatArray]:
    """|1 + W/D| - 1 and the tangent of half its phase, with e taken into W and 1 into D."""
    w_real, w_imag = (e if numerator is None else plus(e, numerator)).whole()
    d_real, d_imag = ONE.whole() if denominator is None else plus(ONE, denominator).whole()
    square = d_real * d_real + d_imag * d_imag
    along = w_real * d_real + w_imag * d_imag
    across = w_imag * d_real - w_real * d_imag
    u = (2.0 * along + (w_real * w_real + w_imag * w_imag)) / square
    # Not the root of 1 + u, which rounding takes below 0 where next to nothing is left of the gain.
    root = np.sqrt(((d_real + w_real) ** 2 + (d_imag + w_imag) ** 2) / square)
    return u / (1.0 + root), across / (square * root + (square + along))


def errors(form: Form, here: Meeting, departing: Departing, ends: int) -> tuple[FloatArray, FloatArray]:
    """The magnitude error and the tangent of half the phase error of pairs at a corner of the parts."""
    departures = departing.at(ends)
    return turned(
        polynomial(form, splits(here.rises), departures),
        polynomial(form, splits(here.loadings), departures),
        split(here.error),
    )
