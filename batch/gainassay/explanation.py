"""One pair, explained: every number behind its verdict, from the same kernel that screens all pairs."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from gainassay.contracts.documents import nearest
from gainassay.contracts.evidence import EVIDENCE, MISSING
from gainassay.contracts.limits import LIMITS, Limit
from gainassay.errors import InputError
from gainassay.forms.cache import formulas_of
from gainassay.forms.coefficients import ComplexArray, FloatArray
from gainassay.forms.departures import AT_DC, DEPARTURES, FIGURES, OPEN_LOOP_GAIN, PLACE, RISING, Departure
from gainassay.forms.evaluation import value
from gainassay.forms.form import Form
from gainassay.forms.topology import Topology, gain_unit
from gainassay.screen import blocks, calibrated, monte_carlo, rss, stability
from gainassay.screen.blocks import Chunk, Group, Screened, lot_of
from gainassay.screen.kernel import NO_TERM, UNBOUNDED
from gainassay.screen.limits import PLACES, SIDES
from gainassay.screen.methods import AT_FREQUENCY, CALIBRATED
from gainassay.screen.monte_carlo import Lot
from gainassay.screen.stability import Looked
from gainassay.screen.verdicts import DOUBTS, VERDICTS, Rules, leaning, reason
from gainassay.tables.eligible import Eligibility
from gainassay.tables.parts import PartTable
from gainassay.tables.spreads import Spreads
from gainassay.tables.stages import StageGroup, StageTable, left_out

PPM = 1e6
POINTS_PER_DECADE = 60
"""Of a curve over frequency."""


@dataclass(frozen=True)
class Figure:
    """A data-sheet number of the part, as this row uses it; nan where nothing is known.

    Attributes
    ----------
    matters : bool
        Whether the stage's gain depends on it at all.
    at_worst : str
        `limit`, of the amplifiers named, or `ideal`: where it stands at the corner that gives the worst error; of a
        calibrated stage, at calibration and afterwards. Empty if there is no finite bound.
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
    """An element: nominal value and value at the worst corner [ohm, F, H]; a blank one is 0 or inf.

    Attributes
    ----------
    tolerance, temperature, drift : float
        How far each may take it, up or down, as a fraction.
    tracks : str
        The elements that it tracks, if its network's ratios are used.
    """

    name: str
    kind: str
    nominal: float
    tolerance: float
    temperature: float
    drift: float
    tracks: str
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
class LimitCheck:
    """A comparison of the stage with an operating limit of the part; nan: not known.

    Attributes
    ----------
    end : str
        Which end of a range it is; empty for a limit of one side.
    asked, allowed, margin : float
        What the stage asks, what the part allows, and by how much that is kept [unit].
    bound : str
        `at most` or `at least`: how what is asked must stand to what is allowed.
    state : str
        `inside` or `outside`, or `not checked` and what is missing.
    """

    name: str
    end: str
    unit: str
    asked: float
    bound: str
    allowed: float
    margin: float
    state: str


@dataclass(frozen=True)
class Share:
    """What a quantity contributes to the standard uncertainty of the error.

    Attributes
    ----------
    half_width : float
        Of its range, over the middle of it.
    sensitivity : float
        Derivative of the error in the quantity's logarithm.
    u_ppm : float
        Standard uncertainty that comes from it [ppm].
    share : float
        Of the variance.
    """

    name: str
    half_width: float
    sensitivity: float
    u_ppm: float
    share: float


@dataclass(frozen=True)
class ViewFigures:
    """The error as root-sum-square and Monte Carlo show it. nan: no finite bound, or the stage is calibrated.

    Attributes
    ----------
    mean_ppm, u_ppm, stated_ppm : float
        Root-sum-square: mean, standard uncertainty, and the error stated with the coverage factor [ppm].
    inside : float
        Probability that a normally distributed error is inside the limit.
    sampled_mean_ppm, sampled_u_ppm : float
        Mean and standard deviation of the samples [ppm].
    yield_mc, yield_mc_u : float
        Share of samples inside the limit, and its standard uncertainty.
    shares : tuple[Share, ...]
        Of all quantities that contribute, the largest first.
    """

    mean_ppm: float
    u_ppm: float
    coverage_factor: float
    stated_ppm: float
    inside: float
    samples: int
    seed: int
    sampled_mean_ppm: float
    sampled_u_ppm: float
    yield_mc: float
    yield_mc_u: float
    shares: tuple[Share, ...]


@dataclass(frozen=True)
class Loop:
    """How stable the loop of an amplifier is, all other loops being closed.

    Attributes
    ----------
    crossover_hz, phase_margin_deg, gain_margin_db : float
        As in the verdict table; nan or infinite where there is none.
    crossovers : int
        How often the loop gain's magnitude passes 1.
    """

    amplifier: str
    crossover_hz: float
    crossovers: int
    phase_margin_deg: float
    gain_margin_db: float


@dataclass(frozen=True)
class StabilityFigures:
    """Stability, and the figures of the part that it is found with.

    Attributes
    ----------
    gbw_hz, second_pole_hz : float
        Gain-bandwidth product and second pole [Hz]; nan: not known, inf: not modelled.
    least_deg : float or None
        The least phase margin of a pass [deg], if the job asks for one.
    doubt : str
        Why the margins prove nothing, if so.
    loops : tuple[Loop, ...]
        Of all amplifiers; none if the gain-bandwidth product is not known.
    """

    gbw_hz: float
    second_pole_hz: float
    least_deg: float | None
    doubt: str
    loops: tuple[Loop, ...]


@dataclass(frozen=True)
class Curves:
    """Gain and loop gains of a pair over frequency, with nominal figures.

    Attributes
    ----------
    hertz : ndarray, shape (frequencies,)
    gain : ndarray of complex
        [gain unit]
    loops : dict
        The loop gain of each amplifier.
    """

    hertz: FloatArray
    gain: ComplexArray
    loops: dict[str, ComplexArray]


@dataclass(frozen=True)
class Explanation:
    """All that decides one pair. Errors in ppm; nan: no finite bound.

    Attributes
    ----------
    calibrated : bool
        Whether errors are of the gain against that at calibration; views are not found then.
    worst_case : str
        What the worst case is, as in the verdict table.
    frequency_hz, phase_error_deg, phase_accuracy_deg : float
        Of a stage at a frequency, as in the verdict table, with the largest phase error that it may have; its gains are
        magnitudes, and views and ports are not found. nan at 0 Hz.
    terms : tuple[Term, ...]
        All terms that are not zero, the largest at the worst corner first; both columns sum to the errors.
    limits : tuple[LimitCheck, ...]
        All operating limits, whether or not they could be checked.
    """

    stage: str
    part: str
    topology: str
    summary: str
    calibrated: bool
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
    worst_case: str
    frequency_hz: float
    phase_error_deg: float
    phase_accuracy_deg: float
    elements: tuple[ElementValue, ...]
    figures: tuple[Figure, ...]
    terms: tuple[Term, ...]
    limits: tuple[LimitCheck, ...]
    views: ViewFigures
    ports: tuple[PortFigure, ...]
    stability: StabilityFigures


def explain(
    stages: StageTable,
    parts: PartTable,
    eligibility: Sequence[Eligibility],
    groups: tuple[Group, ...],
    rules: Rules,
    samples: int,
    stage: str,
    part: str,
) -> Explanation:
    """Explain one pair.

    Parameters
    ----------
    samples : int
        Of its error, for Monte Carlo.

    Raises
    ------
    InputError
        If the stage or the part is not in its table, was rejected, or if they are not eligible for each other.
    """
    names = [name for group in groups for name in group.stage_names.tolist()]
    _require(stage, names, "stage", stages)
    _require(part, parts.names.tolist(), "part", parts)
    place = next(index for index, group in enumerate(groups) if stage in group.stage_names)
    s = int(np.searchsorted(groups[place].stage_names, stage))
    p = int(np.searchsorted(groups[place].part_names, part))
    objection = eligibility[place].objection(s, p)
    if objection:
        raise InputError(f"{stages.source}, {parts.source}: part {part!r} may not serve stage {stage!r}: {objection}")
    one_pair = Chunk(place, slice(s, s + 1), slice(p, p + 1))
    screened = blocks.screen_chunk(groups, one_pair, rules, samples=samples, stability=True)
    return _explanation(screened, samples, stages.groups[place], s, parts, p, rules)


def curves(groups: Sequence[Group], found: Explanation) -> Curves:
    """Gain and loop gains of an explained pair over frequency, wherever these have something to show.

    Raises
    ------
    InputError
        If the part's gain-bandwidth product is not known.
    """
    loops = found.stability.loops
    if not loops:
        raise InputError(f"part {found.part!r} has no gbw_typ or gbw_min, and so no loop gain over frequency to draw")
    group = next(group for group in groups if found.stage in group.stage_names)
    s, p = int(np.searchsorted(group.stage_names, found.stage)), int(np.searchsorted(group.part_names, found.part))
    looked = group.looked(Chunk(0, slice(s, s + 1), slice(p, p + 1)))
    first_pole = found.stability.gbw_hz * float(looked.parts.nominal[DEPARTURES.index(OPEN_LOOP_GAIN), 0])
    last = [loop.crossover_hz for loop in loops if np.isfinite(loop.crossover_hz)] or [found.stability.gbw_hz]
    low, high = math.floor(math.log10(first_pole)) - 1, math.ceil(math.log10(max(last))) + 1
    hertz = np.logspace(low, high, (high - low) * POINTS_PER_DECADE + 1)
    return Curves(hertz, *stability.response(looked, hertz))


def _require(name: str, known: list[str], kind: str, table: StageTable | PartTable) -> None:
    if name in known:
        return
    rejects = [reject for reject in table.rejects if reject.name == name]
    if rejects:
        reasons = "; ".join(f"{r.column} {r.value!r} {r.reason}" for r in rejects)
        raise InputError(f"{rejects[0].source}: row {rejects[0].row}: {kind} {name!r} was rejected: {reasons}")
    hint = nearest(name, known) or "; `gainassay check` says what is in the table"
    raise InputError(f"{table.source}: there is no usable {kind} {name!r}{hint}")


def _explanation(
    screened: Screened, samples: int, of: StageGroup, s: int, parts: PartTable, p: int, rules: Rules
) -> Explanation:
    topology, spreads = of.topology, of.spreads
    side, outcome, judgement = screened.stage_side, screened.outcome, screened.judgement
    corner = int(outcome.corner[0, 0])
    unbounded = corner == UNBOUNDED
    at_nominal = [float(term[0, 0]) * PPM for term in blocks.nominal_accounts(screened)]
    at_worst = [np.nan if unbounded else float(term[0, 0]) * PPM for term in blocks.accounts(screened)]
    method, names = screened.group.method, screened.group.term_names()
    terms = [Term(*values) for values in zip(names, at_nominal, at_worst, strict=True)]
    leans = leaning(int(judgement.leaning[0, 0]))
    gain_ideal, reference = (float(gain[0, 0]) for gain in method.gains(screened.group.form, side, outcome))
    worst = float(outcome.error_worst[0, 0])
    values = screened.group.box.values[:, screened.chunk.stages][:, 0]
    at_corner = values if unbounded else side.corner_values[:, method.corner(screened.group.form, side, corner)[0]]
    return Explanation(
        stage=str(of.names[s]),
        part=str(parts.names[p]),
        topology=topology.name,
        summary=topology.summary,
        calibrated=method is CALIBRATED,
        gain_unit=gain_unit(topology),
        gain_ideal=gain_ideal,
        target_gain=reference,
        gain_nominal=reference * (1.0 + float(outcome.error_nominal[0, 0])),
        gain_worst=reference * (1.0 + worst),
        error_nominal_ppm=float(outcome.error_nominal[0, 0]) * PPM,
        error_worst_ppm=worst * PPM,
        limit_ppm=float(side.limits[0]) * PPM,
        limit_used=float(judgement.limit_used[0, 0]),
        verdict=VERDICTS[int(judgement.verdict[0, 0])],
        reason=reason(int(judgement.reason[0, 0])),
        evidence=leans.evidence,
        leans_on=leans.leans_on,
        dominant_term=_dominant(screened),
        worst_case=method.worst_case,
        frequency_hz=np.nan if outcome.hertz is None else float(outcome.hertz[0, 0]),
        phase_error_deg=np.nan if outcome.phase is None else float(outcome.phase[0, 0]),
        phase_accuracy_deg=float(side.phase_limits[0]) if method is AT_FREQUENCY else np.nan,
        elements=tuple(_elements(screened, spreads.of(np.array([s])), values, at_corner)),
        figures=tuple(_figures(screened, parts, p)),
        terms=tuple(
            sorted(
                (term for term in terms if term.nominal_ppm or term.worst_ppm),
                key=lambda term: (-np.nan_to_num(abs(term.worst_ppm)), names.index(term.name)),
            )
        ),
        limits=tuple(_limits(screened, of, s, parts, p)),
        views=_views(screened, samples),
        ports=() if method is AT_FREQUENCY else tuple(_ports(topology, values, parts.nominal[AT_DC, p])),
        stability=_stability(screened, rules),
    )


def _limits(screened: Screened, of: StageGroup, s: int, parts: PartTable, p: int) -> Iterator[LimitCheck]:
    bounds = screened.group.bounds.of(screened.chunk.stages, screened.chunk.parts)
    for index, (side, place) in enumerate(zip(SIDES, PLACES, strict=True)):
        limit, asked, margin = LIMITS[place], float(bounds.asked[index, 0]), float(bounds.margins(index)[0, 0])
        allowed = asked + margin if side.is_upper else float(bounds.taken[index, 0])
        state = "outside" if margin < 0.0 else "inside"
        if np.isnan(margin):
            state = f"not checked: {_missing(limit, of, s, parts, p)}"
        bound = "at most" if side.is_upper else "at least"
        yield LimitCheck(limit.name, side.end, limit.unit, asked, bound, allowed, margin, state)


def _missing(limit: Limit, of: StageGroup, s: int, parts: PartTable, p: int) -> str:
    """What a limit is not checked for."""
    tables = {"stage": (limit.stages, of.operating, s), "part": (limit.parts, parts.operating, p)}
    blank = {kind: [name for name in names if np.isnan(at[name][row])] for kind, (names, at, row) in tables.items()}
    said = [f"the {kind} gives no {', '.join(names)}" for kind, names in blank.items() if names]
    return "; ".join(said) or "the stage's network leaves it open"


def _dominant(screened: Screened) -> str:
    place = int(screened.outcome.dominant[0, 0])
    return "" if place == NO_TERM else screened.group.dominant_names()[place]


def _stability(screened: Screened, rules: Rules) -> StabilityFigures:
    looked = screened.group.looked(screened.chunk)
    gbw = float(looked.parts.gbw[0])
    assert screened.margins is not None
    return StabilityFigures(
        gbw_hz=gbw,
        second_pole_hz=float(looked.parts.second_pole[0]),
        least_deg=rules.phase_margin,
        doubt=DOUBTS[int(screened.margins.doubt[0, 0])],
        loops=() if np.isnan(gbw) else tuple(_loops(looked)),
    )


def _loops(looked: Looked) -> Iterator[Loop]:
    _, over_grid = stability.response(looked, stability.GRID)
    for amplifier, loop_gain in over_grid.items():
        of_loop = stability.margins_of(looked, amplifier)
        is_above = np.abs(loop_gain) >= 1.0
        yield Loop(
            amplifier=amplifier,
            crossover_hz=float(of_loop.crossover_hz[0, 0]),
            crossovers=int((is_above[1:] != is_above[:-1]).sum()),
            phase_margin_deg=float(of_loop.phase_margin_deg[0, 0]),
            gain_margin_db=float(of_loop.gain_margin_db[0, 0]),
        )


def _views(screened: Screened, samples: int) -> ViewFigures:
    """Both views of a chunk of one pair."""
    lot = lot_of(screened.group, screened.chunk, screened.stage_side, screened.part_side)
    assert screened.views is not None
    seen = {name: float(values[0, 0]) for name, values in vars(screened.views).items()}
    has_bound = not np.isnan(seen["error_mean"])
    limit, error = float(lot.box.limits[0]), np.full(1, np.nan)
    if has_bound:
        error = monte_carlo.errors_of_first(lot, samples)
    return ViewFigures(
        mean_ppm=seen["error_mean"] * PPM,
        u_ppm=seen["error_u"] * PPM,
        coverage_factor=rss.COVERAGE_FACTOR,
        stated_ppm=seen["error_rss"] * PPM,
        inside=rss.probability_inside(seen["error_mean"], seen["error_u"], -limit, limit),
        samples=samples,
        seed=monte_carlo.SEED,
        sampled_mean_ppm=float(error.mean()) * PPM,
        sampled_u_ppm=float(error.std()) * PPM,
        yield_mc=seen["yield_mc"],
        yield_mc_u=seen["yield_mc_u"],
        shares=tuple(_shares(lot, seen["error_u"])) if has_bound else (),
    )


def _shares(lot: Lot, uncertainty: float) -> Iterator[Share]:
    for entry in sorted(rss.budget(lot.form, lot.box, lot.limits), key=lambda entry: -entry.u()):
        share = (entry.u() / uncertainty) ** 2
        yield Share(entry.name, entry.half_width, entry.sensitivity, entry.u() * PPM, share)


def _elements(
    screened: Screened, spreads: Spreads, values: FloatArray, at_corner: FloatArray
) -> Iterator[ElementValue]:
    form, network = screened.group.form, spreads.network[:, 0]
    untied = screened.group.method is not AT_FREQUENCY and screened.stage_side.untied[0]
    for index, name in enumerate(form.elements):
        fellows = [
            other
            for place, other in enumerate(form.elements)
            if network[place] == network[index] >= 0 and place != index and not untied
        ]
        tolerance, temperature, drift = spreads.own[:, index, 0].tolist()
        yield ElementValue(
            name=name,
            kind=form.kinds[index],
            nominal=float(values[index]),
            tolerance=tolerance,
            temperature=temperature,
            drift=drift,
            tracks=", ".join(fellows),
            at_worst=float(at_corner[index]),
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


def _figures(screened: Screened, parts: PartTable, p: int) -> Iterator[Figure]:
    side = screened.part_side
    for index in range(len(side.evidence)):
        departure = FIGURES[index]
        if not (parts.modelled[index] and _is_in_form(screened.group.form, departure)):
            continue
        evidence = EVIDENCE[side.evidence[index, 0]]
        is_missing = evidence == EVIDENCE[MISSING]
        nominal, worst = (
            np.nan if is_missing else departure.figure(float(value))
            for value in (parts.nominal[index, p], side.limits[index, 0])
        )
        matters = bool(screened.stage_side.matters[index, 0])
        at_worst = _at_worst(screened, departure)
        yield Figure(departure.quantity, departure.unit, nominal, worst, evidence, matters, at_worst)


def _is_in_form(form: Form, departure: Departure) -> bool:
    return any(departure in (DEPARTURES[PLACE[symbol]], RISING.get(symbol)) for _, symbol in form.departures)


def _at_worst(screened: Screened, departure: Departure) -> str:
    """Where a figure, of which amplifiers, stands at the corner that gives the worst error."""
    group, code = screened.group, int(screened.outcome.corner[0, 0])
    if code == UNBOUNDED:
        return ""
    method, form = group.method, group.form
    _, place = method.corner(form, screened.stage_side, code)
    own = {
        i: " ".join([amplifier, *_which(DEPARTURES[PLACE[symbol]], symbol)])
        for i, (amplifier, symbol) in enumerate(form.departures)
        if departure in (DEPARTURES[PLACE[symbol]], RISING.get(symbol))
    }
    if method is CALIBRATED:
        at = calibrated.departures_at(form, screened.part_side, place, slice(0, 1))
        return "; ".join(f"{name}: {_change(departure, *at[i, :, 0].tolist())}" for i, name in own.items())
    at_limits = method.at_limits(form, screened.stage_side, place)
    names = [name for i, name in own.items() if (i, departure.quantity) in at_limits]
    return f"limit ({', '.join(names)})" if names else "ideal"


def _which(departure: Departure, symbol: str) -> list[str]:
    """What tells one of a departure's several symbols from the others: its sign, or where it acts."""
    place = departure.symbols.index(symbol)
    return ["+-"[place]] if departure.is_signed else [where.replace("_", " ") for where in departure.places[place:][:1]]


def _change(departure: Departure, before: float, after: float) -> str:
    was, becomes = (
        f"{departure.figure(value):.6g} {departure.unit}" if value else "ideal" for value in (before, after)
    )
    return f"from {was} to {becomes}"
