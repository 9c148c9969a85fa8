"""The form of a topology: ideal gain times correction factor, with its coefficient functions.

With N and D collected by the products m_k of departures,

    gain = G_ideal (1 + sum_k n_k m_k) / (1 + sum_k d_k m_k),    G_ideal = N_0/D_0, n_k = N_k/N_0, d_k = D_k/D_0,

    E = gain/G_ideal - 1 = sum_k (n_k - d_k) m_k / (1 + sum_k d_k m_k).

The form keeps G_ideal, the contrasts n_k - d_k and the loadings d_k as ratios of polynomials in the elements'
admittances, in lowest terms. n_k - d_k is subtracted here, as polynomials, so no digits are lost later.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from gainassay.errors import InputError
from gainassay.forms import nodal
from gainassay.forms.departures import BASIC, DEPARTURES, OPEN_LOOP_GAIN, PLACE, Departure, term_name
from gainassay.forms.multiaffine import MultiAffine
from gainassay.forms.slopes import Polynomial, Slope, polynomial, slopes
from gainassay.forms.topology import Topology


@dataclass(frozen=True)
class Ratio:
    """A ratio of two polynomials in the elements' admittances, in lowest terms."""

    numerator: Polynomial
    denominator: Polynomial

    def degrees(self) -> tuple[int, ...]:
        """Largest exponent of each element in numerator or denominator."""
        exponents = [exponents for _, exponents in (*self.numerator, *self.denominator)]
        return tuple(max(column) for column in zip(*exponents, strict=True))


@dataclass(frozen=True)
class Form:
    """What is derived from a topology, once.

    Attributes
    ----------
    topology : str
        Name of the topology.
    elements, kinds : tuple[str, ...]
        Elements, in the order of the exponents, and the kind of each.
    departures : tuple[tuple[str, str], ...]
        (amplifier, symbol of the departure).
    monomials : tuple[tuple[int, ...], ...]
        The products m_k, each as indices into `departures`.
    terms : tuple[str, ...]
        For each monomial the name of the term of the error account that it is part of.
    gain_ideal : Ratio
        G_ideal [gain unit].
    contrasts, loadings : tuple[Ratio, ...]
        n_k - d_k and d_k, one for each monomial [1/unit of m_k].
    numerator, denominator : Polynomial
        N and D in the elements' admittances and the departures.
    slopes : tuple[Slope, ...]
        Numerators of the gain's partial derivatives in each element's admittance, then in each departure.
    """

    topology: str
    elements: tuple[str, ...]
    kinds: tuple[str, ...]
    departures: tuple[tuple[str, str], ...]
    monomials: tuple[tuple[int, ...], ...]
    terms: tuple[str, ...]
    gain_ideal: Ratio
    contrasts: tuple[Ratio, ...]
    loadings: tuple[Ratio, ...]
    numerator: Polynomial
    denominator: Polynomial
    slopes: tuple[Slope, ...]

    def __hash__(self) -> int:
        """Of what tells forms apart in practice: all of a form takes milliseconds."""
        return hash((self.topology, self.elements, self.departures, self.terms))

    def loops(self) -> tuple[int, ...]:
        """Places of the monomials that are products of 1/A_OL alone.

        Above an amplifier's first pole 1/A_OL grows with s, so their loadings make up the coefficients of the
        characteristic polynomial. Where one of them is negative, feedback is positive and the stage unstable; with
        several amplifiers, for some ratio of their bandwidths at least.
        """
        return tuple(
            place
            for place, monomial in enumerate(self.monomials)
            if all(self.departures[departure][1] in OPEN_LOOP_GAIN.symbols for departure in monomial)
        )

    def has(self, departure: Departure) -> bool:
        """Whether its amplifiers have a departure."""
        return any(symbol in departure.symbols for _, symbol in self.departures)

    def figures(self) -> tuple[tuple[int, ...], ...]:
        """Places of the departures that are one quantity of an amplifier: two, the second against the first, if signed.

        The order is that of the departures.
        """
        found: dict[tuple[str, str], list[int]] = {}
        for place, (amplifier, symbol) in enumerate(self.departures):
            departure = DEPARTURES[PLACE[symbol]]
            found.setdefault((amplifier, departure.symbols[0] if departure.is_signed else symbol), []).append(place)
        return tuple(tuple(places) for places in found.values())

    def accounts(self) -> dict[str, tuple[int, ...]]:
        """Places of the monomials in each term of the error account, by its name."""
        found: dict[str, list[int]] = {}
        for place, name in enumerate(self.terms):
            found.setdefault(name, []).append(place)
        return {name: tuple(places) for name, places in found.items()}


def derive(topology: Topology, departures: Sequence[Departure] = BASIC) -> Form:
    """The form of a topology.

    Parameters
    ----------
    departures : sequence of Departure
        Those that its amplifiers have.

    Raises
    ------
    InputError
        If the ideal gain is zero, infinite or undefined, so that there is no ideal gain to correct.
    """
    gain = nodal.derive(topology, departures)
    numerators = gain.numerator.collect(gain.departure_mask())
    denominators = gain.denominator.collect(gain.departure_mask())
    where = topology.where()
    if 0 not in denominators:
        kind = "infinite or undefined: no feedback reaches the amplifier's inverting input"
        raise InputError(f"{where}: the ideal gain is {kind}; it has no form ideal gain x correction factor")
    if 0 not in numerators:
        raise InputError(
            f"{where}: the ideal gain is zero: the input does not reach the output; "
            "it has no form ideal gain x correction factor"
        )
    ratio = Ratios(gain.elements)
    products = sorted({*numerators, *denominators} - {0}, key=lambda mask: (mask.bit_count(), mask))
    zero = MultiAffine({})
    n_0, d_0 = numerators[0], denominators[0]
    kept = []
    for product in products:
        n_k, d_k = numerators.get(product, zero), denominators.get(product, zero)
        contrast, loading = ratio.difference(n_k, n_0, d_k, d_0), ratio.reduced(d_k, d_0)
        if contrast.numerator or loading.numerator:
            kept.append((_departures_in(product, len(gain.elements)), contrast, loading))
    several = len(topology.amplifiers) > 1
    return Form(
        topology=topology.name,
        elements=gain.elements,
        kinds=tuple(element.kind for element in topology.elements),
        departures=gain.departures,
        monomials=tuple(monomial for monomial, _, _ in kept),
        terms=tuple(_name(monomial, gain.departures, several) for monomial, _, _ in kept),
        gain_ideal=ratio.reduced(n_0, d_0),
        contrasts=tuple(contrast for _, contrast, _ in kept),
        loadings=tuple(loading for _, _, loading in kept),
        numerator=polynomial(gain.numerator, len(gain.elements) + len(gain.departures)),
        denominator=polynomial(gain.denominator, len(gain.elements) + len(gain.departures)),
        slopes=slopes(gain.numerator, gain.denominator, len(gain.elements), len(gain.departures)),
    )


def _departures_in(product: int, first: int) -> tuple[int, ...]:
    return tuple(index - first for index in range(first, product.bit_length()) if product >> index & 1)


def _name(monomial: tuple[int, ...], departures: tuple[tuple[str, str], ...], several: bool) -> str:
    return term_name([(departures[i][0], DEPARTURES[PLACE[departures[i][1]]]) for i in monomial], several)


class Ratios:
    """Ratios of polynomials brought to lowest terms in a ring of sympy's."""

    def __init__(self, elements: tuple[str, ...]) -> None:
        from sympy.polys.domains import ZZ
        from sympy.polys.rings import PolyRing

        self._count = len(elements)
        # Symbols by position: a user's names never reach sympy.
        self._ring = PolyRing([f"y{index}" for index in range(len(elements))], ZZ)

    def _lift(self, polynomial: MultiAffine):  # type: ignore[no-untyped-def]
        return self._ring.from_dict(
            {tuple(mask >> i & 1 for i in range(self._count)): value for mask, value in polynomial}
        )

    def _ratio(self, numerator, denominator) -> Ratio:  # type: ignore[no-untyped-def]
        if not numerator:
            return Ratio((), ((1, (0,) * self._count),))
        top, bottom = numerator.cancel(denominator)
        if bottom.LC < 0:
            top, bottom = -top, -bottom
        return Ratio(_terms(top), _terms(bottom))

    def reduced(self, numerator: MultiAffine, denominator: MultiAffine) -> Ratio:
        """numerator / denominator."""
        return self._ratio(self._lift(numerator), self._lift(denominator))

    def difference(
        self, numerator: MultiAffine, ideal: MultiAffine, other: MultiAffine, other_ideal: MultiAffine
    ) -> Ratio:
        """numerator / ideal - other / other_ideal."""
        n_k, n_0, d_k, d_0 = (self._lift(p) for p in (numerator, ideal, other, other_ideal))
        return self._ratio(n_k * d_0 - d_k * n_0, n_0 * d_0)


def _terms(polynomial) -> Polynomial:  # type: ignore[no-untyped-def]
    return tuple(
        (int(value), tuple(int(e) for e in exponents)) for exponents, value in sorted(polynomial.items(), reverse=True)
    )
