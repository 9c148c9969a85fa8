"""A ratio of multi-affine polynomials in admittances, written as the shortest formula of impedances.

The polynomials are those of a network: admittance symbols y_i = 1/z_i, all products of one polynomial of the
same degree. What is done is algebra alone, and each step is an identity:

- factors that share no symbols with one another are written apart;
- y1 and y2 that occur as y1 + y2 only are one admittance (parallel), as z1 + z2 only are one impedance
  (series);
- an impedance whose symbols fall into groups with zero mixed second derivatives is a series connection, an
  admittance of which the same holds a parallel connection;
- what is left is opened at one element y by the extra element theorem,

      f(y) = f(y -> infinity) (1 + z/Z_n) / (1 + z/Z_d)    or    f(y) = f(0) (1 + y Z_n) / (1 + y Z_d),

  or compared with unity, f = 1 + (P - Q)/Q, or written as f(infinity) + (f(0) - f(infinity))/(1 + z y_d).

Of several formulas the shortest is taken, among equals the first in a fixed order of trials.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from fractions import Fraction
from functools import reduce
from operator import or_

from gainassay.forms.expression import (
    ONE,
    Expression,
    Number,
    children,
    is_negative,
    length,
    parallel,
    product,
    quotient,
    series,
    total,
)
from gainassay.forms.multiaffine import MultiAffine, factors

Pair = tuple[MultiAffine, MultiAffine]
"""Numerator and denominator of a ratio."""

Factors = tuple[MultiAffine, ...]

RATIOS = 5000
"""Ratios that one writer examines; further ones are written out term by term."""

ALL = 1000

TRIALS_AT_FIRST = {5: 8, 6: 4}
"""Trials carried out for a ratio of that many symbols; all for fewer symbols, `TRIALS_OF_MORE` for more."""

TRIALS_OF_MORE = 3

TRIALS_LATER = ((900, 1), (400, 2))
"""Ratios examined, and trials carried out from there on: a search that has grown that far is held short."""

WORTH = 2
"""How many times as long as the ratio written out term by term a formula may be and still be preferred."""


@dataclass(frozen=True)
class Trial:
    """A way to write a ratio by other ratios.

    Attributes
    ----------
    pairs : tuple[Pair, ...]
        The other ratios.
    ones : int
        How often they are compared with 1.
    joined : Callable[[Sequence[Expression]], Expression]
        The formula, from those of the other ratios.
    """

    pairs: tuple[Pair, ...]
    ones: int
    joined: Callable[[Sequence[Expression]], Expression]


class Writer:
    """Writes ratios of polynomials; remembers what it has written.

    Parameters
    ----------
    impedances : Sequence[Expression]
        What the reciprocal of each admittance symbol is called.
    parasitic : int
        Mask of the symbols that are opened before any other where their limit is finite, so that what they
        change stands as one factor: the output conductances of amplifiers.
    """

    def __init__(self, impedances: Sequence[Expression], parasitic: int = 0) -> None:
        self._impedances = list(impedances)
        self._lengths = [length(impedance) for impedance in impedances]
        self._parasitic = parasitic
        self._groups: dict[tuple[str, tuple[int, ...]], int] = {}
        self._written: dict[tuple[Factors, Factors, bool], Expression | None] = {}
        self._factors: dict[MultiAffine, tuple[int, Factors]] = {}
        self._left = RATIOS

    def ratio(self, numerator: MultiAffine, denominator: MultiAffine) -> Expression:
        """numerator / denominator; neither is zero."""
        found = self._ratio(numerator, denominator)
        return _written_out(numerator, denominator, self._impedances) if found is None else found

    def _ratio(self, numerator: MultiAffine, denominator: MultiAffine) -> Expression | None:
        """The same, or None if its formula is being looked for already."""
        coefficient, over, under = self._reduced(numerator, denominator)
        written = []
        for above, below in _connected(over, under):
            # A difference takes the minus in, for as a - b it may be shorter than as -(b - a).
            negative = coefficient < 0 and _has_difference(above, below)
            piece = self._piece(above, below, negative)
            if piece is None:
                return None
            coefficient = -coefficient if negative else coefficient
            written.append(piece)
        return product(written, coefficient=coefficient)

    def _reduced(self, numerator: MultiAffine, denominator: MultiAffine) -> tuple[Fraction, Factors, Factors]:
        """Number, factors above and factors below of the ratio in lowest terms."""
        above, over = self._factored(numerator)
        below, under = self._factored(denominator)
        common = {*over} & {*under}
        if common:
            over = tuple(factor for factor in over if factor not in common)
            under = tuple(factor for factor in under if factor not in common)
        return Fraction(above, below), over, under

    def _factored(self, polynomial: MultiAffine) -> tuple[int, Factors]:
        if polynomial not in self._factors:
            self._factors[polynomial] = factors(polynomial)
        return self._factors[polynomial]

    def _floor(self, numerator: MultiAffine, denominator: MultiAffine) -> int:
        """A length that no formula of the ratio falls below: every symbol stands in it at least once."""
        _, over, under = self._reduced(numerator, denominator)
        return self._length_of(_support(over, under))

    def _length_of(self, support: int) -> int:
        return sum(self._lengths[i] for i in _indices(support))

    def _piece(self, over: Factors, under: Factors, negative: bool) -> Expression | None:
        """Product of `over` / product of `under`, or its negative; they share symbols and have no common factor."""
        degree = sum(factor.degree() for factor in under) - sum(factor.degree() for factor in over)
        if degree < 0 or (degree == 0 and self._is_upside_down(over, under)):
            inverse = self._piece(under, over, negative)
            return None if inverse is None else quotient(ONE, inverse)
        if not over and len(under) == 1 and under[0].support().bit_count() == 1:
            return self._impedances[under[0].support().bit_length() - 1]
        key = (over, under, negative)
        if key not in self._written:
            self._written[key] = None  # a search that comes back to this ratio does not go round
            signed = _negated(over) if negative else over
            self._written[key] = self._find(signed, under, degree)
        return self._written[key]

    def _is_upside_down(self, over: Factors, under: Factors) -> bool:
        """Whether fewer symbols stand alone below than above, parasitic ones counted first."""
        alone = [[f.support() for f in factors_ if f.support().bit_count() == 1] for factors_ in (over, under)]
        above, below = ((sum(1 for s in side if s & self._parasitic), len(side)) for side in alone)
        return above > below

    def _find(self, over: Factors, under: Factors, degree: int) -> Expression | None:
        numerator, denominator = _multiply(over), _multiply(under)
        grouped = self._with_groups(numerator, denominator)
        if grouped is not None:
            return self._ratio(*grouped)
        connection = None
        if degree == 1:
            connection = self._connection(numerator, denominator)
            if connection is not None and not any(map(is_negative, children(connection))):
                return connection
        if self._left <= 0:
            return _written_out(numerator, denominator, self._impedances)
        self._left -= 1
        support = numerator.support() | denominator.support()
        best = connection
        shortest = length(best) if best else WORTH * self._length_written_out(numerator, denominator)
        floor = self._length_of(support)
        trials = sorted(self._trials(over, under, degree), key=self._promise)
        for trial in trials[: self._trials_for(support.bit_count())]:
            candidate = self._carried_out(trial, shortest)
            if candidate is not None and length(candidate) < shortest:
                best, shortest = candidate, length(candidate)
            if shortest <= floor + 1:  # beside the symbols there is a number to compare with
                break
        return _written_out(numerator, denominator, self._impedances) if best is None else best

    def _length_written_out(self, numerator: MultiAffine, denominator: MultiAffine) -> int:
        support = numerator.support() | denominator.support()
        return sum(self._length_of(mask ^ support) for p in (numerator, denominator) for mask in p.terms)

    def _trials_for(self, symbols: int) -> int:
        """How many trials are carried out for a ratio of that many symbols: fewer as the search grows."""
        examined = RATIOS - self._left
        late = next((trials for ratios, trials in TRIALS_LATER if examined > ratios), None)
        if late is not None:
            return late
        return TRIALS_AT_FIRST.get(symbols, ALL if symbols < min(TRIALS_AT_FIRST) else TRIALS_OF_MORE)

    def _promise(self, trial: Trial) -> int:
        """Length that the trial's formula has at least, and what its polynomials let fear, twice over."""
        reduced = [self._reduced(*pair) for pair in trial.pairs]
        symbols = sum(self._length_of(_support(over, under)) for _, over, under in reduced)
        signs = sum(coefficient < 0 for coefficient, _, _ in reduced)
        terms = sum(len(polynomial.terms) for pair in trial.pairs for polynomial in pair)
        return 2 * (trial.ones + symbols + signs) + terms

    def _carried_out(self, trial: Trial, limit: int) -> Expression | None:
        """The trial's formula, None as soon as it cannot be shorter than the limit."""
        floors = [self._floor(*pair) for pair in trial.pairs]
        least = trial.ones + sum(floors)
        found = []
        for pair, floor in zip(trial.pairs, floors, strict=True):
            ratio = self._ratio(*pair) if least < limit else None
            if ratio is None:
                return None
            least += length(ratio) - floor
            found.append(ratio)
        return trial.joined(found)

    def _with_groups(self, numerator: MultiAffine, denominator: MultiAffine) -> Pair | None:
        """The ratio with elements in parallel or in series merged into one symbol, None if there are none."""
        support = numerator.support() | denominator.support()
        for kind in ("parallel", "series"):
            alike: dict[tuple[MultiAffine, MultiAffine], list[int]] = {}
            for i in _indices(support):
                alike.setdefault(_likeness(numerator, denominator, 1 << i, kind), []).append(i)
            groups = [group for group in alike.values() if len(group) > 1]
            if groups:
                for group in groups:
                    symbol = 1 << self._group(kind, tuple(group))
                    merge = _merged_parallel if kind == "parallel" else _merged_series
                    numerator, denominator = (merge(p, group, symbol) for p in (numerator, denominator))
                return numerator, denominator
        return None

    def _group(self, kind: str, members: tuple[int, ...]) -> int:
        """Index of the symbol that stands for elements in parallel or in series."""
        if (kind, members) not in self._groups:
            connect = parallel if kind == "parallel" else series
            self._groups[kind, members] = len(self._impedances)
            self._impedances.append(connect([self._impedances[i] for i in members]))
            self._lengths.append(length(self._impedances[-1]))
        return self._groups[kind, members]

    def _connection(self, numerator: MultiAffine, denominator: MultiAffine) -> Expression | None:
        """The impedance numerator / denominator as a connection in parallel or in series, if it is one."""
        for parts, connect in (
            (_addends(denominator, numerator), parallel),
            (_addends_of_impedances(numerator, denominator), series),
        ):
            if parts is not None:
                pairs = [(below, above) if connect is parallel else (above, below) for above, below in parts]
                written = [self._ratio(*pair) for pair in pairs]
                known = [part for part in written if part is not None]
                return connect(known) if len(known) == len(written) else None
        return None

    def _trials(self, over: Factors, under: Factors, degree: int) -> Iterator[Trial]:
        """Ways to write a ratio that is no plain connection, those that mirror the circuit best first."""
        numerator, denominator = _multiply(over), _multiply(under)
        alone = sorted(factor.support() for factor in under if factor.support().bit_count() == 1)
        parasitic = [symbol for symbol in alone if symbol & self._parasitic]
        if parasitic and degree == 0:
            yield _opened(numerator, denominator, parasitic[-1], shorted=True)
            return
        for symbol in alone:
            yield _opened(numerator, denominator, symbol, shorted=True)
        if degree == 0:
            yield from _beside_unity(numerator, denominator)
            yield from _below_unity(numerator, denominator)
        for index in _indices(numerator.support() | denominator.support()):
            for shorted in (False, True):
                if not (shorted and 1 << index in alone):
                    yield _opened(numerator, denominator, 1 << index, shorted)
        for index in _indices(denominator.support()):
            yield from _divided(over, under, 1 << index, series if degree == 1 else total)


def _opened(numerator: MultiAffine, denominator: MultiAffine, symbol: int, shorted: bool) -> Trial:
    """The extra element theorem at one symbol, referred to the element shorted or taken away."""
    y = MultiAffine({symbol: 1})
    reference: list[MultiAffine] = []
    corrections: list[Pair | None] = []
    for polynomial in (numerator, denominator):
        rest, lead = polynomial.split(symbol)
        lead = lead.times(y)
        main, other = (lead, rest) if shorted else (rest, lead)
        reference.append(main or other)
        corrections.append((other, main) if main and other else None)
    above, below = corrections

    def joined(ratios: Sequence[Expression]) -> Expression:
        base, *others = ratios
        over = [base, total([ONE, others[0]])] if above else [base]
        under = [total([ONE, others[-1]])] if below else []
        return product(over, under)

    pairs = [pair for pair in corrections if pair is not None]
    return Trial(((reference[0], reference[1]), *pairs), len(pairs), joined)


def _beside_unity(numerator: MultiAffine, denominator: MultiAffine) -> Iterator[Trial]:
    """numerator / denominator as 1 + the rest, if the rest has fewer terms."""
    rest = numerator - denominator
    if rest and len(rest.terms) < len(numerator.terms):
        yield Trial(((rest, denominator),), 1, lambda ratios: total([ONE, *ratios]))


def _below_unity(numerator: MultiAffine, denominator: MultiAffine) -> Iterator[Trial]:
    """numerator / denominator as 1 / (1 + the rest), if the rest has fewer terms."""
    rest = denominator - numerator
    if rest and len(rest.terms) < len(denominator.terms):
        yield Trial(((rest, numerator),), 1, lambda ratios: quotient(ONE, total([ONE, *ratios])))


def _divided(
    over: Factors, under: Factors, symbol: int, joined: Callable[[Sequence[Expression]], Expression]
) -> Iterator[Trial]:
    """f(infinity) + (f(0) - f(infinity)) / (1 + y/y_d), where that stays multi-affine."""
    pole = next(factor for factor in under if factor.support() & symbol)
    zero = next((factor for factor in over if factor.support() & symbol), None)
    if zero is None:
        return
    (rest, lead), (zero_rest, zero_lead) = pole.split(symbol), zero.split(symbol)
    others = _multiply(factor for factor in over if factor is not zero)
    below = _multiply(factor for factor in under if factor is not pole)
    if not rest or _share(zero_rest, lead) or _share(zero_lead, rest) or _share(lead, pole):
        return
    # zero/pole = zero_lead/lead + (zero_rest lead - zero_lead rest)/(lead pole), and no product squares.
    remainder = zero_rest.times(lead) - zero_lead.times(rest)
    if not remainder or _share(others, lead) or _share(others, remainder) or _share(below, lead):
        return
    yield Trial(
        (
            (zero_lead.times(others), lead.times(below)),
            (remainder.times(others), lead.times(below).times(pole)),
        ),
        0,
        joined,
    )


def _share(first: MultiAffine, second: MultiAffine) -> bool:
    return bool(first.support() & second.support())


def _multiply(polynomials: Iterable[MultiAffine]) -> MultiAffine:
    """Product of polynomials that share no symbols."""
    return reduce(MultiAffine.times, polynomials, MultiAffine.constant(1))


def _indices(mask: int) -> list[int]:
    found = []
    while mask:
        bit = mask & -mask
        found.append(bit.bit_length() - 1)
        mask ^= bit
    return found


def _has_difference(over: Factors, under: Factors) -> bool:
    """Whether some factor has terms of both signs."""
    return any(value < 0 for factor in (*over, *under) for value in factor.terms.values())


def _negated(over: Factors) -> Factors:
    """Factors of the negative product."""
    return (-over[0], *over[1:]) if over else (MultiAffine.constant(-1),)


def _support(over: Factors, under: Factors) -> int:
    """Mask of the symbols of all factors."""
    return reduce(or_, (factor.support() for factor in (*over, *under)), 0)


def _connected(over: Factors, under: Factors) -> list[tuple[Factors, Factors]]:
    """The factors in groups that share no symbols, the group of the lowest symbol first."""
    groups: list[tuple[int, list[MultiAffine], list[MultiAffine]]] = []
    for factor, place in [(factor, 1) for factor in over] + [(factor, 2) for factor in under]:
        support = factor.support()
        fresh: tuple[int, list[MultiAffine], list[MultiAffine]] = (support, [], [])
        fresh[place].append(factor)  # type: ignore[union-attr]
        apart = []
        for group in groups:
            if group[0] & support:
                fresh = (fresh[0] | group[0], group[1] + fresh[1], group[2] + fresh[2])
            else:
                apart.append(group)
        groups = [*apart, fresh]
    ordered = sorted(groups, key=lambda group: group[0] & -group[0])
    return [
        (tuple(sorted(above, key=MultiAffine.support)), tuple(sorted(below, key=MultiAffine.support)))
        for _, above, below in ordered
    ]


def _likeness(
    numerator: MultiAffine, denominator: MultiAffine, symbol: int, kind: str
) -> tuple[MultiAffine, MultiAffine]:
    """What two symbols have in common if, and only if, the ratio holds them in parallel (or in series).

    In parallel the derivatives are equal (none then holds the other symbol). In series the same is true of
    the impedances, that is of the terms without the symbol, the symbol added.
    """
    if kind == "parallel":
        return numerator.split(symbol)[1], denominator.split(symbol)[1]
    return tuple(  # type: ignore[return-value]
        MultiAffine({mask | symbol: value for mask, value in p.split(symbol)[0].terms.items()})
        for p in (numerator, denominator)
    )


def _merged_parallel(polynomial: MultiAffine, group: Sequence[int], symbol: int) -> MultiAffine:
    """The polynomial in the sum of the group's admittances."""
    members = sum(1 << i for i in group)
    first = 1 << group[0]
    return MultiAffine(
        {
            mask ^ first ^ symbol if mask & members else mask: value
            for mask, value in polynomial.terms.items()
            if not mask & members & ~first
        }
    )


def _merged_series(polynomial: MultiAffine, group: Sequence[int], symbol: int) -> MultiAffine:
    """The polynomial in the admittance of the group in series, times one factor that all have in common."""
    members = sum(1 << i for i in group)
    first = 1 << group[0]
    return MultiAffine(
        {
            mask & ~members | (symbol if mask & members == members else 0): value
            for mask, value in polynomial.terms.items()
            if mask & members | first == members
        }
    )


def _addends(numerator: MultiAffine, denominator: MultiAffine) -> list[Pair] | None:
    """numerator / denominator as a sum of ratios that share no symbols, None if it is no such sum.

    The degree of the numerator exceeds that of the denominator by one. For addends n_i/q_i of this degree,
    the coefficient of m in the numerator, m being a product of one term of each q_j but q_i, is n_i alone: no
    n_j holds a term of q_j, its degree being greater.
    """
    content, poles = factors(denominator)
    one = MultiAffine.constant(1)
    free = _indices(numerator.support() & ~denominator.support())
    remaining = [(pole.support(), pole) for pole in poles] + [(1 << i, one) for i in free]
    rest, parts = numerator, []
    for own, pole in tuple(remaining):
        others = [other for group, other in remaining if group != own]
        addend = _coefficient(rest, own, others)
        if addend is None:
            continue
        left = rest - _multiply([addend, *others])
        left_over = _coefficient(left, left.support() & ~own, [pole])
        if left and (left_over is None or left_over.times(pole) != left):
            continue
        parts.append((addend, pole.times(MultiAffine.constant(content))))
        rest, remaining = left_over or MultiAffine({}), [entry for entry in remaining if entry[0] != own]
        if not rest:
            break
    if parts and rest:
        below = _multiply([pole for _, pole in remaining])
        parts.append((rest, below.times(MultiAffine.constant(content))))
    return parts if len(parts) > 1 else None


def _coefficient(polynomial: MultiAffine, own: int, factors_: Sequence[MultiAffine]) -> MultiAffine | None:
    """The cofactor, in the symbols `own`, of the first term of each of the factors; None if there is none."""
    mark, scale = 0, 1
    for factor in factors_:
        first = min(factor.terms)
        mark, scale = mark | first, scale * factor.terms[first]
    found = {mask & own: value for mask, value in polynomial.terms.items() if mask & ~own == mark}
    if not found or any(value % scale for value in found.values()):
        return None
    return MultiAffine({mask: value // scale for mask, value in found.items()})


def _addends_of_impedances(numerator: MultiAffine, denominator: MultiAffine) -> list[Pair] | None:
    """The same in the reciprocals of the symbols, for connections in series."""
    support = numerator.support() | denominator.support()
    parts = _addends(numerator.inverted(support), denominator.inverted(support))
    if parts is None:
        return None
    inverted = []
    for above, below in parts:
        own = above.support() | below.support()
        inverted.append((above.inverted(own), below.inverted(own)))
    return inverted


def _written_out(numerator: MultiAffine, denominator: MultiAffine, impedances: Sequence[Expression]) -> Expression:
    """The ratio of the polynomials in the impedances, term by term: never wrong, and rarely short."""
    support = numerator.support() | denominator.support()

    def polynomial(terms: MultiAffine) -> Expression:
        return total(
            product([impedances[i] for i in _indices(mask)], coefficient=value) if mask else Number(Fraction(value))
            for mask, value in terms.inverted(support)
        )

    return quotient(polynomial(numerator), polynomial(denominator))
