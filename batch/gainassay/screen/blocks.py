"""A whole screen cut into chunks, each a dask task.

How pairs are cut into chunks follows from the tables alone, since a chunk becomes one file of the verdict
tables. Inside a chunk the kernel cuts as it likes.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, fields, replace
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from gainassay.forms.coefficients import FloatArray
from gainassay.forms.form import Form
from gainassay.screen import calibrated, limits
from gainassay.screen.boxes import StageBox
from gainassay.screen.corners import (
    ActiveSets,
    PartSide,
    StageSide,
    active_sets,
    elements_error,
    stage_side,
    term_names,
)
from gainassay.screen.kernel import PAIRS_PER_BLOCK, UNBOUNDED, Outcome, account, screen
from gainassay.screen.limits import Bounds, Kept
from gainassay.screen.monte_carlo import Lot
from gainassay.screen.signs import Reach, reach
from gainassay.screen.stability import Dynamics, Looked, Margins, margins
from gainassay.screen.verdicts import (
    FAIL,
    LIMIT_TERMS,
    PASS,
    PHASE_MARGIN,
    UNPROVEN,
    VERDICTS,
    Judgement,
    Rules,
    dominant_names,
    judge,
    with_phase_margin,
)
from gainassay.screen.views import Views, views

Written = TypeVar("Written")

PAIRS_PER_CHUNK = 1_000_000
"""Pairs in a chunk at most, and so rows of a verdict file at most. Part of the output format: do not tune it."""


NO_TERM = -1
"""Stands for the dominant term where no term differs from 0."""

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
    calibrated : bool
        Whether only what moves after a calibration counts.
    reach : Reach
        Of all parts: what a chunk leaves out must not depend on which parts are in it.
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
    calibrated: bool
    parts: PartSide
    active_sets: ActiveSets
    reach: Reach
    pattern: NDArray[np.intp]
    eligible: NDArray[np.bool_]
    bounds: Bounds
    dynamics: Dynamics | None = None

    def looked(self, chunk: Chunk) -> Looked:
        """A chunk's stages and parts, as stability sees them."""
        if self.dynamics is None:
            raise ValueError("these parts have no dynamics")
        return Looked(self.form, self.box.values[:, chunk.stages], self.dynamics.part(chunk.parts))

    def corner(self, code: int) -> tuple[int, int]:
        """The stage's and the part's corner that an outcome's `corner` stands for."""
        return divmod(code, calibrated.corners_of_part(self.form) if self.calibrated else len(self.active_sets))


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
    stage_side: StageSide
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
        Pairs by dominant term, in the order of `dominant_names`.
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
    return Group(
        form=form,
        stage_names=stage_names,
        part_names=part_names,
        box=box,
        calibrated=side.changed is not None,
        parts=side,
        active_sets=active_sets(form),
        reach=reach(form, side.limits, box.memberships()),
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
    side = calibrated.stage_side if one.calibrated else stage_side
    stages = side(one.form, one.box.part(chunk.stages), one.reach)
    parts = one.parts.part(chunk.parts)
    pattern, of_patterns = one.pattern[chunk.stages], one.eligible[:, chunk.parts]
    eligible = of_patterns[pattern]
    outcome = (
        _screen(one, stages, parts, block)
        if eligible.all()
        else _screen_eligible(one, stages, parts, pattern, of_patterns, block)
    )
    kept = limits.check(one.bounds.of(chunk.stages, chunk.parts))
    outside = kept.first_outside()
    judgement = judge(stages, parts, outcome, rules, outside)
    # No term decides where all are 0, as with a part of which nothing is known.
    outcome.dominant[outcome.dominant_value == 0.0] = NO_TERM
    is_outside = outside != limits.NONE
    np.copyto(outcome.dominant, outside + np.int16(len(term_names(one.form))), where=is_outside)
    outcome.dominant_value[is_outside] = np.nan
    of_loops = None
    if stability or rules.phase_margin is not None:
        of_loops = margins(one.looked(chunk), eligible)
    if of_loops is not None and rules.phase_margin is not None:
        judgement, below = with_phase_margin(judgement, of_loops, rules.phase_margin)
        outcome.dominant[below] = dominant_names(one.form).index(PHASE_MARGIN)
        outcome.dominant_value[below] = np.nan
    bounded = np.full_like(outcome.error_worst, np.nan) if one.calibrated else outcome.error_worst
    found = None if samples is None else views(lot_of(one, chunk, stages, parts), bounded, samples)
    return Screened(chunk, one, stages, parts, eligible, outcome, judgement, kept, found, of_loops)


def _screen(one: Group, stages: StageSide, parts: PartSide, block: int) -> Outcome:
    if one.calibrated:
        return calibrated.screen(one.form, stages, parts, block)
    return screen(stages, parts, one.active_sets, block)


def accounts(screened: Screened) -> Iterator[FloatArray]:
    """The terms of each pair's error at its corner, as `kernel.account` gives them."""
    one, every = screened.group, slice(None)
    if one.calibrated:
        return calibrated.account(one.form, screened.stage_side, screened.part_side, every, every, screened.outcome)
    return account(screened.stage_side, screened.part_side, one.active_sets, every, every, screened.outcome)


def _screen_eligible(
    one: Group,
    stages: StageSide,
    parts: PartSide,
    pattern: NDArray[np.intp],
    eligible: NDArray[np.bool_],
    block: int,
) -> Outcome:
    """Screen the stages of each pattern against its parts, and leave all other pairs open."""
    shape = (len(pattern), eligible.shape[1])
    nothing = np.full(shape, np.nan)
    found = Outcome(
        nothing,
        nothing.copy(),
        np.full(shape, UNBOUNDED, np.int32),
        np.full(shape, NO_TERM, np.int16),
        nothing.copy(),
        None if stages.slack is None else nothing.copy(),
    )
    for place in np.unique(pattern):
        rows, columns = np.flatnonzero(pattern == place), np.flatnonzero(eligible[place])
        if len(columns):
            only = _screen(one, _only(stages, rows), parts.at(columns), block)
            for field in fields(Outcome):
                if getattr(found, field.name) is not None:
                    getattr(found, field.name)[np.ix_(rows, columns)] = getattr(only, field.name)[rows]
    return found


def _only(stages: StageSide, rows: NDArray[np.intp]) -> StageSide:
    """The same stages with nothing to visit but for some of them."""
    plans = [replace(plan, stages=np.intersect1d(plan.stages, rows)) for plan in stages.plans]
    return replace(stages, plans=tuple(plan for plan in plans if len(plan.stages)))


def lot_of(group: Group, chunk: Chunk, stages: StageSide, parts: PartSide) -> Lot:
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
    names = dominant_names(screened.group.form)
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
        elements_error=elements_error(screened.stage_side),
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
