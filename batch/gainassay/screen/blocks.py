"""A whole screen cut into chunks, each a dask task.

How pairs are cut into chunks follows from the tables alone, since a chunk becomes one file of the verdict
tables. Inside a chunk the kernel cuts as it likes.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import MISSING, dataclass, fields, replace
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from gainassay.forms.coefficients import FloatArray
from gainassay.forms.form import Form
from gainassay.screen import limits
from gainassay.screen.boxes import StageBox
from gainassay.screen.corners import PartSide
from gainassay.screen.kernel import NO_TERM, PAIRS_PER_BLOCK, UNBOUNDED, Outcome
from gainassay.screen.limits import Bounds, Kept
from gainassay.screen.methods import AT_DC, AT_FREQUENCY, CALIBRATED, Method, Side
from gainassay.screen.monte_carlo import Lot
from gainassay.screen.stability import Dynamics, Looked, Margins, margins
from gainassay.screen.verdicts import (
    DECIDING,
    FAIL,
    LIMIT_TERMS,
    PASS,
    PHASE_ERROR,
    PHASE_MARGIN,
    UNPROVEN,
    VERDICTS,
    Judgement,
    Rules,
    is_phase,
    judge,
    with_phase_margin,
)
from gainassay.screen.views import Views, views

Written = TypeVar("Written")

PAIRS_PER_CHUNK = 1_000_000
"""Pairs in a chunk at most, and so rows of a verdict file at most. Part of the output format: do not tune it."""


RANK = {PASS: 0, UNPROVEN: 1, FAIL: 2}
"""Which verdict makes a better part for a stage."""


@dataclass(frozen=True)
class Group:
    """All that is screened with one form.

    Attributes
    ----------
    stage_names : ndarray of str, shape (stages,)
        Ordered.
    part_names : ndarray of str, shape (parts,)
        Ordered.
    method : Method
        How they are screened.
    reach : object
        What the method keeps of all parts: what a chunk leaves out must not depend on which parts are in it.
    pattern : ndarray of int, shape (stages,)
        Place of each stage's pattern.
    eligible : ndarray of bool, shape (patterns, parts)
        The parts that the stages of a pattern are screened against.
    bounds : Bounds
        The operating limits of all stages and parts.
    dynamics : Dynamics or None
        The parts over frequency; none where stability is not looked at.
    """

    form: Form
    stage_names: NDArray[np.str_]
    part_names: NDArray[np.str_]
    box: StageBox
    method: Method
    parts: PartSide
    reach: Any
    pattern: NDArray[np.intp]
    eligible: NDArray[np.bool_]
    bounds: Bounds
    dynamics: Dynamics | None = None

    def looked(self, chunk: Chunk) -> Looked:
        """A chunk's stages and parts, as stability sees them."""
        if self.dynamics is None:
            raise ValueError("these parts have no dynamics")
        return Looked(self.form, self.box.values[:, chunk.stages], self.dynamics.part(chunk.parts))

    def term_names(self) -> tuple[str, ...]:
        """Names of the terms of a row's account."""
        return self.method.term_names(self.form)

    def dominant_names(self) -> tuple[str, ...]:
        """What a pair's dominant term may be: the terms of its account, then what stands for one."""
        return (*self.term_names(), *DECIDING)


@dataclass(frozen=True)
class Chunk:
    """Some stages of a group with some of the parts."""

    group: int
    stages: slice
    parts: slice


@dataclass(frozen=True)
class Screened:
    """A chunk with all that was found.

    Attributes
    ----------
    eligible : ndarray of bool, shape (stages, parts)
        The pairs that were screened; of the others nothing is found, and what stands for them means nothing.
    kept : Kept
        Which operating limits the pairs keep.
    views : Views or None
        On request.
    margins : Margins or None
        On request, or where verdicts need them.
    """

    chunk: Chunk
    group: Group
    stage_side: Side
    part_side: PartSide
    eligible: NDArray[np.bool_]
    outcome: Outcome
    judgement: Judgement
    kept: Kept
    views: Views | None = None
    margins: Margins | None = None


@dataclass(frozen=True)
class Tally:
    """What a chunk adds to the summaries.

    Attributes
    ----------
    by_stage : ndarray, shape (stages, verdicts)
    by_part : ndarray, shape (parts, verdicts)
        Pairs by verdict, in the order of `VERDICTS`.
    dominant : ndarray, shape (terms,)
        Pairs by dominant term, in the order of the group's `dominant_names`.
    outside, unchecked : ndarray, shape (limits,)
        Pairs outside each operating limit, and pairs of which it could not be checked.
    best_part : ndarray of int, shape (stages,)
        Place among the group's parts of the best part, -1 where no part has a finite bound.
    best_rank, best_limit_used : ndarray, shape (stages,)
        Its rank (0: pass, 1: unproven, 2: fail) and its limit_used.
    gain_ideal, limits, elements_error : ndarray, shape (stages,)
        Of each stage: ideal gain, required accuracy, largest signed error of the elements alone.
    """

    chunk: Chunk
    by_stage: NDArray[np.int64]
    by_part: NDArray[np.int64]
    dominant: NDArray[np.int64]
    outside: NDArray[np.int64]
    unchecked: NDArray[np.int64]
    best_part: NDArray[np.int64]
    best_rank: NDArray[np.int64]
    best_limit_used: FloatArray
    gain_ideal: FloatArray
    limits: FloatArray
    elements_error: FloatArray


def group(
    form: Form,
    stages: tuple[NDArray[np.str_], StageBox],
    parts: tuple[NDArray[np.str_], PartSide],
    patterns: tuple[NDArray[np.intp], NDArray[np.bool_]],
    bounds: Bounds,
    dynamics: Dynamics | None = None,
) -> Group:
    """Stages of one form and all parts, each as names and numbers.

    `patterns` says which pairs are screened: `pattern` and `eligible` of the group. Stages are calibrated if the parts
    say what changes after a calibration.
    """
    (stage_names, box), (part_names, side) = stages, parts
    method = AT_FREQUENCY if box.signals is not None else AT_DC if side.changed is None else CALIBRATED
    return Group(
        form=form,
        stage_names=stage_names,
        part_names=part_names,
        box=box,
        method=method,
        parts=side,
        reach=method.reach(form, side, box),
        pattern=patterns[0],
        eligible=patterns[1],
        bounds=bounds,
        dynamics=dynamics,
    )


def chunks(groups: Sequence[Group]) -> tuple[Chunk, ...]:
    """The chunks of a screen, in the order of the verdict tables."""
    found = []
    for place, one in enumerate(groups):
        stages, parts = len(one.stage_names), len(one.part_names)
        width = min(parts, PAIRS_PER_CHUNK)
        height = max(1, PAIRS_PER_CHUNK // width)
        found += [
            Chunk(place, slice(top, min(top + height, stages)), slice(left, min(left + width, parts)))
            for top in range(0, stages, height)
            for left in range(0, parts, width)
        ]
    return tuple(found)


def screen_chunk(
    groups: Sequence[Group],
    chunk: Chunk,
    rules: Rules,
    block: int = PAIRS_PER_BLOCK,
    samples: int | None = None,
    stability: bool = False,
) -> Screened:
    """Screen one chunk, with both views if a number of samples is given, and with the margins of stability."""
    one = groups[chunk.group]
    stages = one.method.side(one.form, one.box.part(chunk.stages), one.reach)
    parts = one.parts.part(chunk.parts)
    pattern, of_patterns = one.pattern[chunk.stages], one.eligible[:, chunk.parts]
    eligible = of_patterns[pattern]
    outcome = (
        one.method.screen(one.form, stages, parts, block)
        if eligible.all()
        else _screen_eligible(one, stages, parts, pattern, of_patterns, block)
    )
    kept = limits.check(one.bounds.of(chunk.stages, chunk.parts))
    outside = kept.first_outside()
    phase_limits = None if one.box.signals is None else one.box.signals.phase_limits[chunk.stages]
    judgement = judge(stages, parts, outcome, rules, outside, phase_limits)
    # No term decides where all are 0, as with a part of which nothing is known.
    outcome.dominant[outcome.dominant_value == 0.0] = NO_TERM
    _decide(one, outcome, outside.astype(np.int16) + np.int16(len(one.term_names())), outside != limits.NONE)
    _decide(one, outcome, one.dominant_names().index(PHASE_ERROR), is_phase(judgement))
    of_loops = None
    if stability or rules.phase_margin is not None:
        of_loops = margins(one.looked(chunk), eligible)
    if of_loops is not None and rules.phase_margin is not None:
        judgement, below = with_phase_margin(judgement, of_loops, rules.phase_margin)
        _decide(one, outcome, one.dominant_names().index(PHASE_MARGIN), below)
    found = None
    if samples is not None:
        bounded = outcome.error_worst if one.method.has_more else np.full_like(outcome.error_worst, np.nan)
        found = views(lot_of(one, chunk, stages, parts), bounded, samples)
    return Screened(chunk, one, stages, parts, eligible, outcome, judgement, kept, found, of_loops)


def _decide(one: Group, outcome: Outcome, place: NDArray[np.int16] | int, where: NDArray[np.bool_]) -> None:
    """Put what decides, a place in the group's `dominant_names`, in place of the dominant term."""
    np.copyto(outcome.dominant, np.asarray(place, np.int16), where=where)
    outcome.dominant_value[where] = np.nan


def accounts(screened: Screened) -> Iterator[FloatArray]:
    """The terms of each pair's error at its corner, in the order of the group's `term_names`."""
    one = screened.group
    return one.method.account(one.form, screened.stage_side, screened.part_side, screened.outcome)


def nominal_accounts(screened: Screened) -> Iterator[FloatArray]:
    """The terms of each pair's nominal error."""
    one = screened.group
    return one.method.nominal_account(one.form, screened.stage_side, screened.part_side, screened.outcome)


def _screen_eligible(
    one: Group,
    stages: Side,
    parts: PartSide,
    pattern: NDArray[np.intp],
    eligible: NDArray[np.bool_],
    block: int,
) -> Outcome:
    """Screen the stages of each pattern against its parts, and leave all other pairs open."""
    shape = (len(pattern), eligible.shape[1])
    blank: dict[str, Any] = {"corner": np.int32(UNBOUNDED), "dominant": np.int16(NO_TERM)}
    always = [field.name for field in fields(Outcome) if field.default is MISSING]
    found: dict[str, Any] = {name: np.full(shape, blank.get(name, np.nan)) for name in always}
    for place in np.unique(pattern):
        rows, columns = np.flatnonzero(pattern == place), np.flatnonzero(eligible[place])
        if len(columns):
            only = one.method.screen(one.form, _only(stages, rows), parts.at(columns), block)
            for field in fields(Outcome):
                values = getattr(only, field.name)
                if values is not None:
                    whole = found.setdefault(field.name, np.full(shape, blank.get(field.name, np.nan)))
                    whole[np.ix_(rows, columns)] = values[rows]
    return Outcome(**found)


def _only(stages: Side, rows: NDArray[np.intp]) -> Side:
    """The same stages with nothing to visit but for some of them."""
    plans = [replace(plan, stages=plan.stages[np.isin(stages.stages_of(plan), rows)]) for plan in stages.plans]
    return replace(stages, plans=tuple(plan for plan in plans if len(plan.stages)))


def lot_of(group: Group, chunk: Chunk, stages: Side, parts: PartSide) -> Lot:
    """What the views need of a chunk."""
    box = replace(group.box.part(chunk.stages).at_dc(group.form.kinds), targets=stages.reference)
    return Lot(group.form, box, group.stage_names[chunk.stages], group.part_names[chunk.parts], parts.limits)


def tally(screened: Screened) -> Tally:
    """What a screened chunk adds to the summaries."""
    verdict, used = screened.judgement.verdict, screened.judgement.limit_used
    is_verdict = np.stack([(verdict == code) & screened.eligible for code in range(len(VERDICTS))])
    rank = np.array([RANK[code] for code in range(len(VERDICTS))])[verdict]
    # Lexicographic minimum of (rank, limit_used) along each stage; the first of equals, as parts are ordered.
    bounded_rank = np.where(np.isnan(used) | ~screened.eligible, len(VERDICTS), rank)
    best_rank = bounded_rank.min(axis=1)
    candidate = np.where(bounded_rank == best_rank[:, None], np.nan_to_num(used, nan=np.inf), np.inf)
    best = candidate.argmin(axis=1)
    found = best_rank < len(VERDICTS)
    # NO_TERM is -1, counted in the first place and left out.
    names = screened.group.dominant_names()
    by_place = np.bincount(screened.outcome.dominant[screened.eligible] + 1, minlength=len(names) + 1)
    return Tally(
        chunk=screened.chunk,
        by_stage=is_verdict.sum(axis=2).T,
        by_part=is_verdict.sum(axis=1).T,
        dominant=by_place[1:],
        outside=_by_limit(screened.kept.outside, screened.eligible),
        unchecked=_by_limit(screened.kept.unchecked, screened.eligible),
        best_part=np.where(found, best + screened.chunk.parts.start, -1),
        best_rank=best_rank,
        best_limit_used=np.where(found, used[np.arange(len(best)), best], np.nan),
        gain_ideal=screened.stage_side.gain_ideal,
        limits=screened.stage_side.limits,
        elements_error=screened.group.method.elements_error(screened.stage_side),
    )


def _by_limit(codes: NDArray[np.uint8], eligible: NDArray[np.bool_]) -> NDArray[np.int64]:
    """Pairs by operating limit, of the eligible ones."""
    count = np.bincount(codes[eligible], minlength=1 << len(LIMIT_TERMS))
    return np.array([count[limits.holding(place)].sum() for place in range(len(LIMIT_TERMS))])


def run(
    groups: Sequence[Group],
    rules: Rules,
    keep: Callable[[int, Screened], Written],
    workers: int,
    block: int = PAIRS_PER_BLOCK,
    after_each: Callable[[int], None] | None = None,
    samples: int | None = None,
    stability: bool = False,
) -> list[tuple[Written, Tally]]:
    """Screen all chunks as dask tasks and hand each to `keep`.

    Parameters
    ----------
    rules : Rules
        The decision rule.
    keep : callable
        Called in the task with the chunk's place and the screened chunk; writes it down.
    workers : int
        Threads.
    after_each : callable, optional
        Called with the number of pairs when a chunk is done.
    samples : int, optional
        Of each pair, for its views; none are looked at if not given.
    stability : bool
        Whether to look at the margins of stability even where no verdict needs them.

    Returns
    -------
    list
        For each chunk, in order, what `keep` returned and the chunk's tally.
    """
    import dask
    from dask.callbacks import Callback

    planned = chunks(groups)

    def task(place: int) -> tuple[Written, Tally]:
        screened = screen_chunk(groups, planned[place], rules, block, samples, stability)
        return keep(place, screened), tally(screened)

    def done(key: object, result: object, *_: object) -> None:
        if after_each is not None and isinstance(result, tuple):
            after_each(int(result[1].by_stage.sum()))

    tasks = [dask.delayed(task, pure=False)(place) for place in range(len(planned))]
    with Callback(posttask=done):
        return list(dask.compute(*tasks, scheduler="threads", num_workers=workers, optimize_graph=False))
