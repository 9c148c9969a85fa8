"""A whole screen cut into chunks, each a dask task.

How pairs are cut into chunks follows from the tables alone, since a chunk becomes one file of the verdict
tables. Inside a chunk the kernel cuts as it likes.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from gainassay.forms.coefficients import FloatArray
from gainassay.forms.form import Form
from gainassay.screen.boxes import StageBox
from gainassay.screen.corners import (
    PartSide,
    StageSide,
    active_sets,
    elements_error,
    part_side,
    stage_side,
    term_names,
)
from gainassay.screen.kernel import PAIRS_PER_BLOCK, Outcome, screen
from gainassay.screen.monte_carlo import Lot
from gainassay.screen.signs import Reach, reach
from gainassay.screen.verdicts import FAIL, PASS, UNPROVEN, VERDICTS, Judgement, Rules, judge
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
    reach : Reach
        Of all parts: what a chunk leaves out must not depend on which parts are in it.
    """

    form: Form
    stage_names: NDArray[np.str_]
    part_names: NDArray[np.str_]
    box: StageBox
    parts: PartSide
    active_sets: tuple[tuple[int, ...], ...]
    reach: Reach


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
    views : Views or None
        On request.
    """

    chunk: Chunk
    group: Group
    stage_side: StageSide
    part_side: PartSide
    outcome: Outcome
    judgement: Judgement
    views: Views | None = None


@dataclass(frozen=True)
class Tally:
    """What a chunk adds to the summaries.

    Attributes
    ----------
    by_stage : ndarray, shape (stages, verdicts)
    by_part : ndarray, shape (parts, verdicts)
        Pairs by verdict, in the order of `VERDICTS`.
    dominant : ndarray, shape (terms,)
        Pairs by dominant term.
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
    best_part: NDArray[np.int64]
    best_rank: NDArray[np.int64]
    best_limit_used: FloatArray
    gain_ideal: FloatArray
    limits: FloatArray
    elements_error: FloatArray


def group(
    form: Form,
    stage_names: NDArray[np.str_],
    box: StageBox,
    part_names: NDArray[np.str_],
    nominal: FloatArray,
    worst: FloatArray,
    evidence: NDArray[np.uint8],
) -> Group:
    """Stages of one form and all parts; `nominal`, `worst` and `evidence` have shape (departures, parts)."""
    return Group(
        form,
        stage_names,
        part_names,
        box,
        part_side(form, nominal, worst, evidence),
        active_sets(form),
        reach(form, worst, box.memberships()),
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
    groups: Sequence[Group], chunk: Chunk, rules: Rules, block: int = PAIRS_PER_BLOCK, samples: int | None = None
) -> Screened:
    """Screen one chunk, with both views if a number of samples is given."""
    one = groups[chunk.group]
    stages = stage_side(one.form, one.box.part(chunk.stages), one.reach)
    parts = one.parts.part(chunk.parts)
    outcome = screen(stages, parts, one.active_sets, block)
    judgement = judge(stages, parts, outcome, rules)
    # No term decides where all are 0, as with a part of which nothing is known.
    outcome.dominant[outcome.dominant_value == 0.0] = NO_TERM
    found = None if samples is None else views(lot_of(one, chunk, stages, parts), outcome.error_worst, samples)
    return Screened(chunk, one, stages, parts, outcome, judgement, found)


def lot_of(group: Group, chunk: Chunk, stages: StageSide, parts: PartSide) -> Lot:
    """What the views need of a chunk."""
    box = replace(group.box.part(chunk.stages).at_dc(group.form.kinds), targets=stages.reference)
    return Lot(group.form, box, group.stage_names[chunk.stages], group.part_names[chunk.parts], parts.limits)


def tally(screened: Screened) -> Tally:
    """What a screened chunk adds to the summaries."""
    verdict, used = screened.judgement.verdict, screened.judgement.limit_used
    is_verdict = np.stack([verdict == code for code in range(len(VERDICTS))])
    rank = np.array([RANK[code] for code in range(len(VERDICTS))])[verdict]
    # Lexicographic minimum of (rank, limit_used) along each stage; the first of equals, as parts are ordered.
    bounded_rank = np.where(np.isnan(used), len(VERDICTS), rank)
    best_rank = bounded_rank.min(axis=1)
    candidate = np.where(bounded_rank == best_rank[:, None], np.nan_to_num(used, nan=np.inf), np.inf)
    best = candidate.argmin(axis=1)
    found = best_rank < len(VERDICTS)
    # NO_TERM is -1, counted in the first place and left out.
    by_place = np.bincount(screened.outcome.dominant.ravel() + 1, minlength=len(term_names(screened.group.form)) + 1)
    return Tally(
        chunk=screened.chunk,
        by_stage=is_verdict.sum(axis=2).T,
        by_part=is_verdict.sum(axis=1).T,
        dominant=by_place[1:],
        best_part=np.where(found, best + screened.chunk.parts.start, -1),
        best_rank=best_rank,
        best_limit_used=np.where(found, used[np.arange(len(best)), best], np.nan),
        gain_ideal=screened.stage_side.gain_ideal,
        limits=screened.stage_side.limits,
        elements_error=elements_error(screened.stage_side),
    )


def run(
    groups: Sequence[Group],
    rules: Rules,
    keep: Callable[[int, Screened], Written],
    workers: int,
    block: int = PAIRS_PER_BLOCK,
    after_each: Callable[[int], None] | None = None,
    samples: int | None = None,
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

    Returns
    -------
    list
        For each chunk, in order, what `keep` returned and the chunk's tally.
    """
    import dask
    from dask.callbacks import Callback

    planned = chunks(groups)

    def task(place: int) -> tuple[Written, Tally]:
        screened = screen_chunk(groups, planned[place], rules, block, samples)
        return keep(place, screened), tally(screened)

    def done(key: object, result: object, *_: object) -> None:
        if after_each is not None and isinstance(result, tuple):
            after_each(int(result[1].by_stage.sum()))

    tasks = [dask.delayed(task, pure=False)(place) for place in range(len(planned))]
    with Callback(posttask=done):
        return list(dask.compute(*tasks, scheduler="threads", num_workers=workers, optimize_graph=False))
