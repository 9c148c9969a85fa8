"""One pair, explained: every number behind its verdict, from the same kernel that screens all pairs."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from gainassay.contracts.documents import nearest
from gainassay.contracts.evidence import EVIDENCE, MISSING
from gainassay.errors import InputError
from gainassay.forms.cache import formulas_of
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.departures import DEPARTURES
from gainassay.forms.evaluation import value
from gainassay.forms.topology import Topology, gain_unit
from gainassay.screen import blocks
from gainassay.screen.blocks import NO_TERM, Chunk, Group, Screened
from gainassay.screen.corners import term_names
from gainassay.screen.kernel import UNBOUNDED, account, nominal_account
from gainassay.screen.verdicts import LEANINGS, REASONS, VERDICTS, Rules
from gainassay.tables.parts import PartTable
from gainassay.tables.stages import StageTable, left_out

PPM = 1e6


@dataclass(frozen=True)
class Figure:
    """A data-sheet number of the part, as this row uses it; nan where nothing is known.

    Attributes
    ----------
    matters : bool
        Whether the stage's gain depends on it at all.
    at_worst : str
        `limit` or `ideal`: where it stands at the corner that gives the worst error; for several amplifiers of
        different kind, `limit` with their names. Empty if there is no finite bound.
    """

    quantity: str
    unit: str
    nominal: float
    worst: float
    evidence: str
    matters: bool
    at_worst: str


@dataclass(frozen=True)
class ElementValue:
    """An element: nominal value and value at the worst corner [ohm, F, H]; a blank one is 0 or inf."""

    name: str
    kind: str
    nominal: float
    tolerance: float
    at_worst: float


@dataclass(frozen=True)
class Term:
    """A term of the account [ppm], with nominal figures and at the worst corner."""

    name: str
    nominal_ppm: float
    worst_ppm: float


@dataclass(frozen=True)
class PortFigure:
    """An impedance or a return ratio of the stage with the part's nominal figures, at 0 Hz."""

    symbol: str
    meaning: str
    unit: str
    value: float


@dataclass(frozen=True)
class Explanation:
    """All that decides one pair. Errors in ppm; nan: no finite bound.

    Attributes
    ----------
    terms : tuple[Term, ...]
        All terms that are not zero, the largest at the worst corner first; both columns sum to the errors.
    """

    stage: str
    part: str
    topology: str
    summary: str
    gain_unit: str
    gain_ideal: float
    target_gain: float
    gain_nominal: float
    gain_worst: float
    error_nominal_ppm: float
    error_worst_ppm: float
    limit_ppm: float
    limit_used: float
    verdict: str
    reason: str
    evidence: str
    leans_on: str
    dominant_term: str
    elements: tuple[ElementValue, ...]
    figures: tuple[Figure, ...]
    terms: tuple[Term, ...]
    ports: tuple[PortFigure, ...]


def explain(
    stages: StageTable, parts: PartTable, groups: tuple[Group, ...], rules: Rules, stage: str, part: str
) -> Explanation:
    """Explain one pair.

    Raises
    ------
    InputError
        If the stage or the part is not in its table, or was rejected.
    """
    names = [name for group in groups for name in group.stage_names.tolist()]
    _require(stage, names, "stage", stages)
    _require(part, parts.names.tolist(), "part", parts)
    place = next(index for index, group in enumerate(groups) if stage in group.stage_names)
    s = int(np.searchsorted(groups[place].stage_names, stage))
    p = int(np.searchsorted(groups[place].part_names, part))
    screened = blocks.screen_chunk(groups, Chunk(place, slice(s, s + 1), slice(p, p + 1)), rules)
    return _explanation(screened, stages.groups[place].topology, stage, parts, p)


def _require(name: str, known: list[str], kind: str, table: StageTable | PartTable) -> None:
    if name in known:
        return
    rejects = [reject for reject in table.rejects if reject.name == name]
    if rejects:
        reasons = "; ".join(f"{r.column} {r.value!r} {r.reason}" for r in rejects)
        raise InputError(f"{rejects[0].source}: row {rejects[0].row}: {kind} {name!r} was rejected: {reasons}")
    hint = nearest(name, known) or "; `gainassay check` says what is in the table"
    raise InputError(f"{table.source}: there is no usable {kind} {name!r}{hint}")


def _explanation(screened: Screened, topology: Topology, stage: str, parts: PartTable, p: int) -> Explanation:
    side, outcome, judgement = screened.stage_side, screened.outcome, screened.judgement
    sets = screened.group.active_sets
    one = slice(0, 1)
    corner = int(outcome.corner[0, 0])
    unbounded = corner == UNBOUNDED
    at_nominal = [float(term[0, 0]) * PPM for term in nominal_account(side, screened.part_side)]
    at_worst = [
        np.nan if unbounded else float(term[0, 0]) * PPM
        for term in account(side, screened.part_side, sets, one, one, outcome.corner)
    ]
    names = term_names(screened.group.form)
    terms = [Term(*values) for values in zip(names, at_nominal, at_worst, strict=True)]
    leaning = LEANINGS[int(judgement.leaning[0, 0])]
    reference = float(side.reference[0])
    worst = float(outcome.error_worst[0, 0])
    values = screened.group.box.values[:, screened.chunk.stages][:, 0]
    tolerances = screened.group.box.tolerances[:, screened.chunk.stages][:, 0]
    at_corner = values if unbounded else side.corner_values[:, corner // len(sets)]
    return Explanation(
        stage=stage,
        part=str(parts.names[p]),
        topology=topology.name,
        summary=topology.summary,
        gain_unit=gain_unit(topology),
        gain_ideal=float(side.gain_ideal[0]),
        target_gain=reference,
        gain_nominal=reference * (1.0 + float(outcome.error_nominal[0, 0])),
        gain_worst=reference * (1.0 + worst),
        error_nominal_ppm=float(outcome.error_nominal[0, 0]) * PPM,
        error_worst_ppm=worst * PPM,
        limit_ppm=float(side.limits[0]) * PPM,
        limit_used=float(judgement.limit_used[0, 0]),
        verdict=VERDICTS[int(judgement.verdict[0, 0])],
        reason=REASONS[int(judgement.reason[0, 0])],
        evidence=leaning.evidence,
        leans_on=leaning.leans_on,
        dominant_term="" if outcome.dominant[0, 0] == NO_TERM else names[int(outcome.dominant[0, 0])],
        elements=tuple(
            ElementValue(name, kind, float(nominal), float(tolerance), float(at_worst))
            for name, kind, nominal, tolerance, at_worst in zip(
                screened.group.form.elements,
                screened.group.form.kinds,
                values,
                tolerances,
                at_corner,
                strict=True,
            )
        ),
        figures=tuple(_figures(parts, p, side.matters[:, 0].tolist(), _at_limit(screened.group, corner))),
        terms=tuple(
            sorted(
                (term for term in terms if term.nominal_ppm or term.worst_ppm),
                key=lambda term: (-np.nan_to_num(abs(term.worst_ppm)), names.index(term.name)),
            )
        ),
        ports=tuple(_ports(topology, values, parts.nominal[:, p])),
    )


def _ports(topology: Topology, values: FloatArray, departures: FloatArray) -> Iterator[PortFigure]:
    """Closed-loop input and output impedance, and return ratios, from the proved formulas."""
    formulas = formulas_of(topology, left_out(topology, values[:, None]))
    figures = {element.name: np.float64(ohms) for element, ohms in zip(topology.elements, values, strict=True)}
    with np.errstate(all="ignore"):
        figures |= formulas.data_sheet(departures)
        for formula in formulas.stated()[2:]:
            unit = "ohm" if formula.symbol.startswith("z") else ""
            meaning = formula.meaning.partition(":")[0]
            yield PortFigure(formula.symbol, meaning, unit, float(value(formula.expression, figures)))


def _at_limit(group: Group, corner: int) -> list[tuple[str, str]] | None:
    """The departures (amplifier, symbol) that are not 0 at a corner; None if there is no finite bound."""
    if corner == UNBOUNDED:
        return None
    active = group.active_sets[corner % len(group.active_sets)]
    return [group.form.departures[i] for i in sorted({i for k in active for i in group.form.monomials[k]})]


def _figures(parts: PartTable, p: int, matters: list[bool], at_limit: list[tuple[str, str]] | None) -> Iterator[Figure]:
    for index, departure in enumerate(DEPARTURES):
        if not parts.modelled[index]:
            continue
        evidence = EVIDENCE[parts.evidence[index, p]]
        nominal, worst = (
            np.nan if evidence == EVIDENCE[MISSING] else 1.0 / float(value) if departure.reciprocal else float(value)
            for value in (parts.nominal[index, p], parts.worst[index, p])
        )
        amplifiers = [amplifier for amplifier, symbol in at_limit or () if symbol == departure.symbol]
        at_worst = "" if at_limit is None else f"limit ({', '.join(amplifiers)})" if amplifiers else "ideal"
        yield Figure(departure.quantity, departure.unit, nominal, worst, evidence, matters[index], at_worst)
