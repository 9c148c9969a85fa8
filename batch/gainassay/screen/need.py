"""What a pair needs in order to pass: how large one departure of the part may become, all else as it is.

With x the limit of one kind of departure, at a corner of the pair

    error = e + (1 + e) N(x) / D(x) = A(x) / D(x),    A = e D + (1 + e) N,

where N = sum_k c_k m_k and D = 1 + sum_k d_k m_k are polynomials in x, of degree one with one amplifier. The error is
inside the limit L, and D not negative, where neither of A - L D and -A - L D is above 0. With one amplifier the first
x at which one of them rises above 0 is a closed form. With several, x stands in each, and a crossing is found by
bisection. Since 0 stays in the box, the worst error never falls as x grows: the least crossing over all corners is
what the pair needs, whichever crossing of a corner was found.

Which corners may be left out is proved for departures up to a stated size. A pair that would bear more is looked at
again with a wider proof, up to the poorest figure that is looked at (`Departure.poorest`).
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from numpy.typing import NDArray

from gainassay.forms import coefficients
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.departures import DEPARTURES, PLACE, Departure
from gainassay.forms.form import Form
from gainassay.screen.blocks import Screened
from gainassay.screen.boxes import StageBox
from gainassay.screen.corners import (
    StageSide,
    active_sets,
    part_side,
    products,
    stage_side,
)
from gainassay.screen.kernel import PAIRS_PER_BLOCK, add_products, in_blocks, worst_errors
from gainassay.screen.signs import reach
from gainassay.screen.tracking import excess
from gainassay.screen.verdicts import Rules
from gainassay.screen.visits import MOST_OPEN_ELEMENTS, Plan

ROOM = 1e-12
"""Share of the limit that is kept free, so that a need put back does not fail by rounding."""

STEP, STEPS = 100.0, 4
"""By how much each wider proof reaches further than the one before it, and how many there are at most."""

SETTLINGS = 7
"""How often what lies beyond the corners is taken anew; odd, so that the last need is on the safe side."""

FLOAT_BITS = 63
"""Bisections that part all positive floats."""

ROWS_AT_A_TIME = 64
"""Pairs whose worst case is taken together, each with all the others' parts: so some thousands of products."""


@dataclass(frozen=True)
class Asked:
    """Which pairs are asked about: stages of one form, each with some parts.

    Attributes
    ----------
    box : StageBox
        The stages; their limits are the largest errors that pass, the guard band taken off.
    others : ndarray, shape (departures, stages or 1, parts or 1)
        The parts' departures at their limits, in the order of `DEPARTURES`.
    table : ndarray, shape (departures, all parts)
        Those of all parts, which say how far the first proof reaches. What is found for a pair depends on these
        and on nothing else beside it.
    """

    form: Form
    box: StageBox
    others: FloatArray
    table: FloatArray

    def part(self, stages: NDArray[np.intp]) -> Asked:
        """Some of the stages."""
        others = self.others if self.others.shape[1] == 1 else self.others[:, stages]
        return replace(self, box=self.box.part(stages), others=others)


def passing(box: StageBox, rules: Rules) -> StageBox:
    """Stages whose limits are the largest errors that pass."""
    return replace(box, limits=box.limits * (1.0 - rules.guard_band))


def of_chunk(screened: Screened, rules: Rules) -> Asked:
    """What the pairs of a chunk need is asked."""
    group, chunk = screened.group, screened.chunk
    limits = group.parts.limits
    return Asked(group.form, passing(group.box.part(chunk.stages), rules), limits[:, None, chunk.parts], limits)


def needed(asked: Asked) -> FloatArray:
    """The poorest figure of each quantity with which a pair would pass, all else as it is.

    Returns
    -------
    ndarray, shape (departures, stages, parts)
        [unit of the quantity]; `Departure.poorest` where the pair would bear even that, nan where no figure is good
        enough, and for a quantity that the form has not.
    """
    found = np.full((len(asked.table), len(asked.box.limits), asked.others.shape[2]), np.nan)
    for kind, (needs, departure) in enumerate(zip(found, DEPARTURES, strict=False)):
        if asked.form.has(departure):
            needs[:] = figure(departure, bearable(asked, kind))
    return found


def figure(departure: Departure, limit: FloatArray) -> FloatArray:
    """The data-sheet figure of a departure; nan where it would be infinite.

    >>> figure(DEPARTURES[0], np.array([1e-5, 0.0]))
    array([100000.,     nan])
    """
    if not departure.reciprocal:
        return limit
    return np.divide(1.0, limit, out=np.full_like(limit, np.nan), where=limit > 0.0)


def bearable(asked: Asked, kind: int) -> FloatArray:
    """How large the limit of one kind of departure may be.

    Returns
    -------
    ndarray, shape (stages, parts)
        The limit, in every amplifier at once; nan where not even 0 is small enough.
    """
    reaches = np.array(_reaches(asked, kind))
    found = np.full((len(asked.box.limits), asked.others.shape[2]), reaches[-1])
    proof = np.zeros(found.shape, np.intp)
    for place, reached in enumerate(reaches.tolist()):
        is_asked = proof == place
        rows = np.flatnonzero(is_asked.any(axis=1))
        if len(rows):
            at = _bearable_within(asked.part(rows), kind, reached, np.where(is_asked, found, 0.0)[rows])
            found[rows] = np.where(is_asked[rows], at, found[rows])
            # Further corners can only lower what was found: a proof that reaches so far is the last one needed.
            is_beyond = is_asked & (found > reached)
            proof[is_beyond] = np.searchsorted(reaches, found[is_beyond])
    return found


def _reaches(asked: Asked, kind: int) -> list[float]:
    """How far one proof after the other reaches in a kind of departure; the first as far as the table."""
    in_table = float(asked.table[kind].max(initial=0.0))
    departure = DEPARTURES[kind]
    poorest = 1.0 / departure.poorest if departure.reciprocal else departure.poorest
    wider = [poorest]
    while len(wider) < STEPS:
        wider.append(wider[-1] / STEP)
    first = [in_table] if in_table else []
    if first and len(asked.form.elements) > MOST_OPEN_ELEMENTS:
        return first  # beyond it there might be more corners than can be visited
    return first + [upto for upto in reversed(wider) if upto > in_table]


def within_corners(side: StageSide, limits: FloatArray, allowed: FloatArray) -> FloatArray:
    """The largest error at a corner that passes, once what may lie beyond the corners is taken off.

    Parameters
    ----------
    limits : ndarray, shape (departures, stages, parts)
    allowed : ndarray, shape (stages, parts)
    """
    if side.slack is None:
        return allowed
    # Exactly what is allowed where nothing lies beyond: other stages of a chunk may have networks, this one none.
    return np.asarray(allowed + (1.0 + allowed) * np.expm1(-excess(side.slack, limits)))


def _bearable_within(asked: Asked, kind: int, reached: float, upto: FloatArray) -> FloatArray:
    """What each pair bears, up to `upto`, at the corners that must be visited for departures as large as `reached`."""
    table = asked.table.copy()
    table[kind] = reached
    side = stage_side(asked.form, asked.box, reach(asked.form, table, asked.box.memberships()))
    others = asked.others.copy()
    others[kind] = 1.0
    degrees = [sum(PLACE[asked.form.departures[i][1]] == kind for i in monomial) for monomial in asked.form.monomials]
    rest, sets = products(asked.form, others), active_sets(asked.form)
    allowed = np.broadcast_to(side.limits[:, None], upto.shape)
    found = _bearable(side, rest, degrees, sets, allowed, upto)
    if side.slack is None:
        return found
    # What may lie beyond the corners grows with x: too much room, then too little, then nearer to the truth.
    for _ in range(SETTLINGS):
        at = np.broadcast_to(others, (len(others), *upto.shape)).copy()
        at[kind] = np.nan_to_num(found)
        found = _bearable(side, rest, degrees, sets, within_corners(side, at, allowed), upto)
    return found


def _bearable(
    side: StageSide,
    rest: FloatArray,
    degrees: Sequence[int],
    sets: Sequence[Sequence[int]],
    allowed: FloatArray,
    upto: FloatArray,
) -> FloatArray:
    """The largest x, up to `upto`, that each pair bears; nan where not even 0 is small enough.

    Parameters
    ----------
    rest : ndarray, shape (terms, stages or 1, parts or 1)
        The products m_k without their powers of x.
    degrees : sequence of int
        Those powers.
    sets : sequence of sequences of int
        As `active_sets` gives them.
    allowed, upto : ndarray, shape (stages, parts)
        The largest error that passes, as a fraction; the largest x.
    """
    found = np.empty_like(upto)
    with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
        for plan, rows, columns in in_blocks(side, found.shape[1], PAIRS_PER_BLOCK):
            own = rest[:, :, columns] if rest.shape[1] == 1 else rest[:, rows, columns]
            within = allowed[rows, columns], upto[rows, columns]
            found[rows, columns] = _in_block(side, own, degrees, sets, plan.corners, rows, *within)
    return found


def _in_block(
    side: StageSide,
    rest: FloatArray,
    degrees: Sequence[int],
    active: Sequence[Sequence[int]],
    corners: Sequence[tuple[int, int]],
    rows: NDArray[np.intp],
    allowed: FloatArray,
    upto: FloatArray,
) -> FloatArray:
    found, is_inside = upto, np.full(upto.shape, bool(corners))
    is_settled = False
    while not is_settled:
        before = found
        for j, q in corners:
            sides = _sides(side, rest, degrees, active[q], side.first[rows] + j, allowed)
            is_inside &= (sides[:, 0] <= 0.0).all(axis=0)
            found = _first_crossing(sides, found)
        # A crossing that bisection found need not be a corner's first; then another corner is outside before it.
        is_settled = max(degrees, default=0) <= 1 or bool((found == before).all())
    return np.where(is_inside, found, np.nan)


def _sides(
    side: StageSide,
    rest: FloatArray,
    degrees: Sequence[int],
    active: Sequence[int],
    at: NDArray[np.intp],
    allowed: FloatArray,
) -> FloatArray:
    """The polynomials in x that are not above 0 where the error at a corner is inside the limit.

    Returns
    -------
    ndarray, shape (2, degree + 1, stages, parts)
        A - L D and -A - L D, their coefficients from the lowest power up.
    """
    highest = max((degrees[k] for k in active), default=0)
    numerator, denominator = np.zeros((2, highest + 1, len(at), rest.shape[2]))
    denominator[0] = 1.0
    for power in range(highest + 1):
        of_power = [k for k in active if degrees[k] == power]
        contrasts, loadings = side.corner_contrasts[of_power][:, at], side.corner_loadings[of_power][:, at]
        add_products(contrasts[..., None], loadings[..., None], rest[of_power], numerator[power], denominator[power])
    e = side.corner_error[at, None]
    error = e * denominator + (1.0 + e) * numerator
    allowance = allowed * (1.0 - ROOM) * denominator
    return np.stack([error - allowance, -error - allowance])


def _first_crossing(sides: FloatArray, upto: FloatArray) -> FloatArray:
    """Where one of two polynomials rises above 0 before `upto`, neither being above 0 at 0."""
    if sides.shape[1] == 1:
        return upto
    if sides.shape[1] == 2:
        start, slope = sides[:, 0], sides[:, 1]
        return np.asarray(np.fmin.reduce([upto, *np.where(slope > 0.0, -start / slope, np.inf)]))
    is_outside = ~_is_inside(sides, upto)
    if not is_outside.any():
        return upto
    found, of_these = upto.copy(), sides[:, :, is_outside]
    found[is_outside] = last(lambda x: _is_inside(of_these, x), upto[is_outside])
    return found


def _is_inside(sides: FloatArray, x: FloatArray) -> NDArray[np.bool_]:
    value = sides[:, -1]
    for power in range(sides.shape[1] - 2, -1, -1):
        value = value * x + sides[:, power]
    return np.asarray((value <= 0.0).all(axis=0))


def last(holds: Callable[[FloatArray], NDArray[np.bool_]], upto: FloatArray) -> FloatArray:
    """A float between 0 and `upto` at which something holds and after which it does not, to the last bit.

    Positive floats are ordered as the integers of the same bits, and these are bisected.

    >>> last(lambda x: x * x <= 2.0, np.array([9.0]))
    array([1.41421356])
    """
    low, high = np.zeros(upto.shape, np.int64), upto.view(np.int64)
    for _ in range(FLOAT_BITS):
        middle = low + (high - low) // 2
        good = holds(middle.view(np.float64))
        low, high = np.where(good, middle, low), np.where(good, high, middle)
    return np.asarray(low.view(np.float64), np.float64)


def bearable_spread(asked: Asked) -> FloatArray:
    """The factor, up to 1, by which all that spreads the elements would have to shrink for a stage to pass.

    Parameters
    ----------
    asked : Asked
        Stages with one part each, or all with the same.

    Returns
    -------
    ndarray, shape (stages,)
        nan where even exact elements do not pass: the set-point, or the part, is too far off.
    """
    sets = active_sets(asked.form)
    side = stage_side(asked.form, asked.box, reach(asked.form, asked.table, asked.box.memberships()))
    beyond = np.broadcast_to(asked.others, (len(asked.others), len(side.limits), 1))
    allowed = within_corners(side, beyond, side.limits[:, None])
    side = replace(side, plans=_with_lost_ones(side, len(sets)))
    whole = products(asked.form, asked.others)
    powers, one = [0] * len(whole), np.ones((len(asked.box.limits), 1))

    def passes(factor: FloatArray) -> NDArray[np.bool_]:
        shrunk = _shrunk(asked, side, factor)
        return shrunk.regular & ~np.isnan(_bearable(shrunk, whole, powers, sets, allowed, one)[:, 0])

    found = last(passes, np.ones(len(one)))
    return np.where(passes(found), found, np.nan)


def _corner_counts(side: StageSide) -> NDArray[np.intp]:
    return np.diff(np.append(side.first, side.corner_values.shape[1]))


def _with_lost_ones(side: StageSide, sets: int) -> tuple[Plan, ...]:
    """The plans, stages that are not regular visiting every corner: nothing was proved of them, so all are there."""
    lost = np.flatnonzero(~side.regular)
    counts = _corner_counts(side)[lost]
    every = [Plan(lost[counts == count], tuple(product(range(count), range(sets)))) for count in set(counts.tolist())]
    return (*(plan for plan in side.plans if plan.corners), *every)


def _shrunk(asked: Asked, side: StageSide, factor: FloatArray) -> StageSide:
    """The same corners where the elements spread `factor` times as far; what is proved of the whole holds inside."""
    stage = np.repeat(np.arange(len(factor)), _corner_counts(side))
    nominal, reference = asked.box.values[:, stage], side.reference[stage]
    with np.errstate(invalid="ignore", divide="ignore"):
        values = np.where(np.isfinite(nominal), nominal + factor[stage] * (side.corner_values - nominal), nominal)
        at = coefficients.evaluate(asked.form, coefficients.at_dc(asked.form, values))
        is_regular = (
            (np.sign(at.gain_ideal) == np.sign(side.gain_ideal[stage]))
            & np.isfinite(at.gain_ideal)
            & ~coefficients.is_feedback_positive(asked.form, at)
        )
        return replace(
            side,
            corner_values=values,
            corner_contrasts=at.contrasts,
            corner_loadings=at.loadings,
            corner_error=(at.gain_ideal - reference) / reference,
            regular=np.logical_and.reduceat(is_regular, side.first),
        )


def paired_errors(form: Form, box: StageBox, worst: FloatArray) -> FloatArray:
    """The worst error of each stage with its own part, by the kernel that screens; nan: no finite bound.

    Parameters
    ----------
    worst : ndarray, shape (departures, stages)
    """
    found = np.empty(len(box.limits))
    for top in range(0, len(found), ROWS_AT_A_TIME):
        rows = slice(top, top + ROWS_AT_A_TIME)
        parts = part_side(form, worst[:, rows], worst[:, rows], np.zeros(worst[:, rows].shape, np.uint8))
        own = box.part(rows)
        side = stage_side(form, own, reach(form, worst[:, rows], own.memberships()))
        found[rows] = np.diagonal(worst_errors(side, parts, active_sets(form))[0])
    return found
