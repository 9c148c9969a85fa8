"""What a person reads of a topology: its gain, its resistances and its loops, in meaningful form.

With N and D ordered by the gains of the amplifiers (a = 1/A_OL),

    gain = (N_0/D_0) (1 + a N_1/N_0) / (1 + a D_1/D_0),

each ratio is written as short as it can be (`simplest`), and each formula is proved (`proof`). Input and
output impedance are written as Blackman did, Z = Z_dead (1 + T_short)/(1 + T_open), with the amplifiers dead
(A = 0) in Z_dead; the return ratio of an amplifier is T = A D(a = 0)/D_a, the source being dead.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, fields
from itertools import cycle, islice
from typing import Any

from gainassay.errors import InputError
from gainassay.forms import nodal, proof, render
from gainassay.forms.departures import BASIC, DEPARTURES, OPEN_LOOP_GAIN
from gainassay.forms.expression import ONE, Expression, Quantity, length, product, quotient, total
from gainassay.forms.multiaffine import MultiAffine, factors
from gainassay.forms.nodal import NetworkFunction
from gainassay.forms.simplest import Writer
from gainassay.forms.topology import Topology


@dataclass(frozen=True)
class GainFormula:
    """ideal * numerator / denominator.

    Attributes
    ----------
    ideal : Expression
        The ideal gain.
    numerator, denominator : Expression
        What the amplifiers' departures make of it; both are 1 for ideal amplifiers.
    """

    ideal: Expression
    numerator: Expression
    denominator: Expression

    @property
    def whole(self) -> Expression:
        """The gain as one expression."""
        return product([self.ideal, self.numerator], [self.denominator])


@dataclass(frozen=True)
class BlackmanFormula:
    """dead * shorted / opened.

    Attributes
    ----------
    dead : Expression
        The impedance with all amplifiers dead.
    shorted, opened : Expression
        1 + T with the port shorted and open; for several amplifiers, the return differences of all together.
    """

    dead: Expression
    shorted: Expression
    opened: Expression

    @property
    def whole(self) -> Expression:
        """The impedance as one expression."""
        return product([self.dead, self.shorted], [self.opened])


@dataclass(frozen=True)
class Stated:
    """A formula with what it is called.

    Attributes
    ----------
    symbol : str
        What stands left of the equals sign.
    meaning : str
        What it is.
    expression : Expression
        The formula.
    """

    symbol: str
    meaning: str
    expression: Expression


@dataclass(frozen=True)
class Formulas:
    """What a person reads of a topology; every formula is proved.

    Attributes
    ----------
    quantities : tuple[Quantity, ...]
        The elements and the amplifiers' data-sheet quantities, by the position of their symbols.
    gain : GainFormula
        The closed-loop gain.
    input_impedance, output_impedance : BlackmanFormula | None
        Seen by the source and by the load; None where it is infinite, zero or not defined by the network.
    inputs : tuple[tuple[str, BlackmanFormula], ...]
        For a pair, each node and its impedance to ground, the other source dead.
    return_ratios : tuple[tuple[str, Expression], ...]
        Each amplifier's name and return ratio.
    """

    quantities: tuple[Quantity, ...]
    gain: GainFormula
    input_impedance: BlackmanFormula | None
    inputs: tuple[tuple[str, BlackmanFormula], ...]
    output_impedance: BlackmanFormula | None
    return_ratios: tuple[tuple[str, Expression], ...]

    def data_sheet(self, departures: Iterable[Any]) -> dict[str, Any]:
        """Values of the amplifiers' quantities by name, one part serving all, from its departures.

        Parameters
        ----------
        departures : iterable
            In the order of `DEPARTURES`; numpy numbers or arrays, so that 1/0 is infinity.
        """
        amplifiers = [q for q in self.quantities if q.kind not in ("resistor", "capacitor", "inductor")]
        return {
            quantity.name: 1.0 / value if quantity.reciprocal else value
            for quantity, value in zip(amplifiers, cycle(islice(departures, len(BASIC))), strict=False)
        }

    def stated(self) -> tuple[Stated, ...]:
        """Every formula there is, in the order in which a person reads them."""
        found = [
            Stated("G", "ideal gain", self.gain.ideal),
            Stated("gain", "closed-loop gain: ideal gain x correction factor", self.gain.whole),
        ]
        blackman = "amplifiers dead x (1 + T shorted)/(1 + T open)"
        if self.input_impedance:
            found.append(Stated("z_in", f"input impedance: {blackman}", self.input_impedance.whole))
        for node, formula in self.inputs:
            meaning = f"input impedance at {node}, the other source dead: {blackman}"
            found.append(Stated(f"z_{node}", meaning, formula.whole))
        if self.output_impedance:
            found.append(Stated("z_out", f"output impedance: {blackman}", self.output_impedance.whole))
        for amplifier, ratio in self.return_ratios:
            symbol = "T" if len(self.return_ratios) == 1 else f"T_{amplifier}"
            found.append(Stated(symbol, f"return ratio of {amplifier}", ratio))
        return tuple(found)

    def to_tree(self) -> dict[str, Any]:
        """The formulas as dictionaries and lists, for JSON; `from_tree` reads them back."""
        return {
            # Formulas are made by `derive` alone, which proves each; an entry without this is none.
            "proved": "identity of polynomials",
            "quantities": [render.tree(quantity) for quantity in self.quantities],
            "gain": _trees(self.gain),
            "input_impedance": None if self.input_impedance is None else _trees(self.input_impedance),
            "inputs": {node: _trees(formula) for node, formula in self.inputs},
            "output_impedance": None if self.output_impedance is None else _trees(self.output_impedance),
            "return_ratios": {name: render.tree(ratio) for name, ratio in self.return_ratios},
        }

    @staticmethod
    def from_tree(found: Mapping[str, Any]) -> Formulas:
        """The formulas that `to_tree` wrote.

        Raises
        ------
        ValueError, KeyError, TypeError
            If it is no such tree.
        """
        if found["proved"] != "identity of polynomials":
            raise ValueError("formulas that are not proved")
        impedances = [
            None if found[which] is None else BlackmanFormula(**_expressions(found[which]))
            for which in ("input_impedance", "output_impedance")
        ]
        return Formulas(
            quantities=tuple(_quantity(entry) for entry in found["quantities"]),
            gain=GainFormula(**_expressions(found["gain"])),
            input_impedance=impedances[0],
            inputs=tuple((node, BlackmanFormula(**_expressions(entry))) for node, entry in found["inputs"].items()),
            output_impedance=impedances[1],
            return_ratios=tuple((name, render.expression_of(ratio)) for name, ratio in found["return_ratios"].items()),
        )

    def _repr_latex_(self) -> str:
        """All formulas, as a notebook shows them."""
        rows = (
            rf"{render.latex_symbol(formula.symbol)} &= {render.latex(formula.expression)}" for formula in self.stated()
        )
        return r"$\displaystyle \begin{aligned}" + r" \\ ".join(rows) + r"\end{aligned}$"

    def _repr_html_(self) -> str:
        """The same, for what shows HTML."""
        return "".join(f"<p>{f.symbol}: {f.meaning}</p>{render.mathml(f.expression)}" for f in self.stated())


def _trees(formula: GainFormula | BlackmanFormula) -> dict[str, Any]:
    return {field.name: render.tree(getattr(formula, field.name)) for field in fields(formula)}


def _expressions(found: Mapping[str, Any]) -> dict[str, Expression]:
    return {name: render.expression_of(entry) for name, entry in found.items()}


def _quantity(entry: Mapping[str, Any]) -> Quantity:
    found = render.expression_of(entry)
    if not isinstance(found, Quantity):
        raise ValueError(f"no quantity: {entry!r}")  # noqa: TRY004 - a fault of the text read, not of a type
    return found


def derive(topology: Topology, absent: Mapping[str, str] | None = None) -> Formulas:
    """The formulas of a topology.

    Parameters
    ----------
    absent : Mapping[str, str], optional
        What is left out, by name of the quantity: elements `open` or `short`, amplifiers' quantities `ideal`.

    Raises
    ------
    InputError
        If the topology has no unique gain, or its ideal gain is zero or infinite.
    """
    found = quantities(topology)
    gain = nodal.derive(topology)
    names: list[str | tuple[str, str]] = [*gain.elements, *gain.departures]
    named = {quantity.name: name for quantity, name in zip(found, names, strict=True)}
    states = {named[name]: state for name, state in (absent or {}).items()}
    gain = gain.without(states)
    seen_by_source = nodal.input_impedance(topology).without(states)
    pair = topology.input if len(topology.input) > 1 else ()
    at_inputs = [(node, nodal.input_impedance_at(topology, node).without(states)) for node in pair]
    seen_by_load = nodal.output_impedance(topology).without(states)
    writer = writer_for(found)
    try:
        gain_found = gain_formula(gain, found, writer)
    except InputError as error:
        raise InputError(f"{topology.where()}: {error}") from None
    return Formulas(
        quantities=found,
        gain=gain_found,
        input_impedance=blackman_formula(seen_by_source, found, writer),
        inputs=tuple(
            (node, formula)
            for node, impedance in at_inputs
            if (formula := blackman_formula(impedance, found, writer)) is not None
        ),
        output_impedance=blackman_formula(seen_by_load, found, writer),
        return_ratios=tuple(
            (amplifier.name, ratio)
            for amplifier in topology.amplifiers
            if (ratio := return_ratio(gain, found, amplifier.name, writer)) is not None
        ),
    )


def quantities(topology: Topology) -> tuple[Quantity, ...]:
    """Elements, then the data-sheet quantities of each amplifier, in the order of their symbols.

    A quantity of an amplifier is called `r_o`; with several amplifiers, or beside an element of that name,
    `r_o_u1`; and `u1.r_o`, as no element can be called, if an element has that name too.
    """
    elements = [
        Quantity(index, element.name, element.kind, reciprocal=True) for index, element in enumerate(topology.elements)
    ]
    taken = {element.name for element in topology.elements}
    pairs = [(amplifier.name, departure) for amplifier in topology.amplifiers for departure in BASIC]
    styles = ["{quantity}_{amplifier}", "{amplifier}.{quantity}"]
    if len(topology.amplifiers) == 1:
        styles.insert(0, "{quantity}")
    for style in styles:
        names = [
            style.format(quantity=_called(departure.quantity), amplifier=amplifier) for amplifier, departure in pairs
        ]
        if not taken & {*names}:
            break
    return (
        *elements,
        *(
            Quantity(len(elements) + i, name, departure.term, departure.reciprocal)
            for i, (name, (_, departure)) in enumerate(zip(names, pairs, strict=True))
        ),
    )


def _called(quantity: str) -> str:
    return {"a_ol": "A", "cmrr": "CMRR"}.get(quantity, quantity)


def writer_for(named: tuple[Quantity, ...]) -> Writer:
    """A writer for functions of one network; what it found for one function it remembers for the next."""
    return Writer(named, parasitic=_outputs(named))


def gain_formula(gain: NetworkFunction, named: tuple[Quantity, ...], writer: Writer | None = None) -> GainFormula:
    """The gain in meaningful form, proved.

    Raises
    ------
    InputError
        If the ideal gain is zero, infinite or undefined.
    """
    algebra = _Algebra(named, writer or writer_for(named))
    numerator, denominator = algebra.in_admittances(gain)
    ideal_numerator, ideal_denominator = (algebra.ideal(p) for p in (numerator, denominator))
    if not ideal_numerator or not ideal_denominator:
        raise InputError("the ideal gain is zero, infinite or undefined: there is no ideal gain to correct")
    # What is read first is searched first, while the search is at its widest.
    ideal = algebra.writer.ratio(ideal_numerator, ideal_denominator)
    loop = algebra.corrected(denominator)
    found = GainFormula(ideal, algebra.corrected(numerator), loop)
    proof.prove(found.whole, gain.numerator, gain.denominator, len(named))
    return found


def blackman_formula(
    impedance: NetworkFunction, named: tuple[Quantity, ...], writer: Writer | None = None
) -> BlackmanFormula | None:
    """An impedance in Blackman's form, proved; None if it is zero or infinite, with or without the loops."""
    algebra = _Algebra(named, writer or writer_for(named), dead=True)
    numerator, denominator = algebra.in_admittances(impedance)
    dead_numerator, dead_denominator = (algebra.ideal(p) for p in (numerator, denominator))
    if not dead_numerator or not dead_denominator:
        return None
    found = BlackmanFormula(
        dead=algebra.writer.ratio(dead_numerator, dead_denominator),
        shorted=algebra.corrected(numerator),
        opened=algebra.corrected(denominator),
    )
    proof.prove(found.whole, impedance.numerator, impedance.denominator, len(named))
    return found


def return_ratio(
    gain: NetworkFunction, named: tuple[Quantity, ...], amplifier: str, writer: Writer | None = None
) -> Expression | None:
    """The return ratio of an amplifier, the other amplifiers at work, proved; None if there is no loop."""
    position = len(gain.elements) + gain.departures.index((amplifier, *OPEN_LOOP_GAIN.symbols))
    rest, lead = gain.denominator.split(1 << position)
    if not rest or not lead:
        return None
    scaled = lead.times(MultiAffine.symbol(position))
    algebra = _Algebra(named, writer or writer_for(named))
    found = algebra.ratio(*algebra.in_admittances(NetworkFunction((), (), rest, scaled)))
    proof.prove(found, rest, scaled, len(named))
    return found


class _Algebra:
    """The polynomials of one network in admittances, and formulas of what departs from their ideal parts.

    Parameters
    ----------
    named : tuple[Quantity, ...]
        The quantities, by the position of their symbols.
    writer : Writer
        Writes the ratios of polynomials in admittances.
    dead : bool
        True if the ideal part is that of dead amplifiers (A = 0), False if of ideal ones (1/A = 0).
    """

    def __init__(self, named: tuple[Quantity, ...], writer: Writer, dead: bool = False) -> None:
        self._named = named
        self._gains = sum(1 << q.symbol for q in named if not _is_impedance(q))
        self._flipped = _outputs(named) | (self._gains if dead else 0)
        self._dead = dead
        self.writer = writer
        self._corrections: dict[MultiAffine, Expression] = {}

    def in_admittances(self, function: NetworkFunction) -> tuple[MultiAffine, MultiAffine]:
        """Numerator and denominator with 1/r_o for r_o (and A for 1/A, if the ideal is a dead amplifier)."""
        return function.numerator.inverted(self._flipped), function.denominator.inverted(self._flipped)

    def ideal(self, polynomial: MultiAffine) -> MultiAffine:
        """The part without amplifiers' departures (or without their gains)."""
        return polynomial.collect(self._gains).get(0, MultiAffine({}))

    def ratio(self, numerator: MultiAffine, denominator: MultiAffine) -> Expression:
        """numerator / denominator: the lowest parts, and what corrects each."""
        over, over_gains, over_base = self._lowest(numerator)
        under, under_gains, under_base = self._lowest(denominator)
        return product([over_gains, self.writer.ratio(over_base, under_base), over], [under_gains, under])

    def _lowest(self, polynomial: MultiAffine) -> tuple[Expression, Expression, MultiAffine]:
        """(sum of all parts / first part, product of gains in the first part, its coefficient)."""
        lowest = min(polynomial.collect(self._gains), key=lambda mask: (mask.bit_count(), mask))
        base = polynomial.collect(self._gains)[lowest]
        if lowest == 0:
            return self.corrected(polynomial), ONE, base
        others = total(self._addends(polynomial, base))
        gains = product([self._gain(1 << i) for i in range(lowest.bit_length()) if lowest >> i & 1])
        return quotient(others, gains), gains, base

    def corrected(self, polynomial: MultiAffine) -> Expression:
        """polynomial / its ideal part, which is not zero: a product of comparisons with unity."""
        found = []
        for factor in factors(polynomial)[1]:
            if factor.support() & self._gains:
                if factor not in self._corrections:
                    self._corrections[factor] = total(self._addends(factor, self.ideal(factor)))
                found.append(self._corrections[factor])
        return product(found)

    def _addends(self, polynomial: MultiAffine, base: MultiAffine) -> list[Expression]:
        """Addends of polynomial / base in the gains, nested so that the whole is shortest."""
        if not polynomial:
            return []
        gains = polynomial.support() & self._gains
        if not gains:
            return [self.writer.ratio(polynomial, base)]
        best: list[Expression] = []
        for index in range(gains.bit_length()):
            if gains >> index & 1:
                rest, lead = polynomial.split(1 << index)
                nested = product([self._gain(1 << index), self._over(lead, base)])
                addends = [*self._addends(rest, base), nested]
                if not best or sum(map(length, addends)) < sum(map(length, best)):
                    best = addends
        return best

    def _over(self, polynomial: MultiAffine, base: MultiAffine) -> Expression:
        """polynomial / base, as its ideal part over the base times what corrects that."""
        ideal = self.ideal(polynomial)
        if not ideal:
            return total(self._addends(polynomial, base))
        return product([self.writer.ratio(ideal, base), self.corrected(polynomial)])

    def _gain(self, symbol: int) -> Expression:
        """The factor that a gain's symbol stands for."""
        quantity = self._named[symbol.bit_length() - 1]
        return quantity if quantity.reciprocal == self._dead else quotient(ONE, quantity)


def _outputs(named: tuple[Quantity, ...]) -> int:
    """Mask of the symbols that are impedances themselves: output resistances."""
    return sum(1 << q.symbol for q in named if _is_impedance(q) and not q.reciprocal)


def _is_impedance(quantity: Quantity) -> bool:
    return quantity.kind in ("resistor", "capacitor", "inductor") or any(
        departure.term == quantity.kind and departure.unit == "ohm" for departure in DEPARTURES
    )
