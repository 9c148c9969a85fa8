"""The numeric screen of stages against parts: whole-array operations, nothing symbolic, no loop over pairs.

With c = n_k - d_k and d = d_k of the stages and the products m_k of the parts, for all pairs at once,

    E = sum_k c_k m_k / (1 + sum_k d_k m_k),    error = e + (1 + e) E,

e being the error of the ideal gain. Sums run over k in a fixed order, one multiply and one add each, so that
no bit of a result depends on how the pairs were cut into blocks (a library's matrix product does not promise
that).
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gainassay.forms.coefficients import FloatArray
from gainassay.screen.corners import PartSide, StageSide

PAIRS_PER_BLOCK = 65_536
"""Pairs evaluated at a time: enough that Python's own time does not count, few enough to stay in the cache."""

UNBOUNDED = -1
"""Stands for a pair's corner where the worst case has no finite bound."""


@dataclass(frozen=True)
class Outcome:
    """What a screen finds for each pair. All arrays have shape (stages, parts).

    Attributes
    ----------
    error_nominal, error_worst : ndarray
        Errors as fractions; nan where there is none (nominal) or no finite bound (worst).
    corner : ndarray of int
        The corner that gives the worst error: stage corner times the number of active sets, plus the place of
        the active set; `UNBOUNDED` where there is no finite bound.
    dominant : ndarray of int
        Place, in the account, of the term of largest magnitude at that corner.
    dominant_value : ndarray
        That term as a fraction; nan where there is no finite bound.
    """

    error_nominal: FloatArray
    error_worst: FloatArray
    corner: NDArray[np.int32]
    dominant: NDArray[np.int16]
    dominant_value: FloatArray


def screen(
    stages: StageSide, parts: PartSide, active_sets: Sequence[Sequence[int]], block: int = PAIRS_PER_BLOCK
) -> Outcome:
    """Screen all stages against all parts.

    Parameters
    ----------
    active_sets : sequence of sequences of int
        The corners of the parts' box, as `corners.active_sets` gives them.
    block : int
        Pairs evaluated at a time. It changes the time taken, and no bit of the result.
    """
    shape = (len(stages.limits), parts.worst.shape[1])
    outcome = Outcome(
        np.empty(shape),
        np.empty(shape),
        np.empty(shape, np.int32),
        np.empty(shape, np.int16),
        np.empty(shape),
    )
    width = max(1, min(shape[1], block))
    height = max(1, block // width)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        for top in range(0, shape[0], height):
            rows = slice(top, min(top + height, shape[0]))
            for left in range(0, shape[1], width):
                columns = slice(left, min(left + width, shape[1]))
                _screen_block(stages, parts, active_sets, rows, columns, outcome)
    return outcome


def _screen_block(
    stages: StageSide,
    parts: PartSide,
    active_sets: Sequence[Sequence[int]],
    rows: slice,
    columns: slice,
    outcome: Outcome,
) -> None:
    outcome.error_nominal[rows, columns] = _nominal(stages, parts, rows, columns)
    worst, corner = _worst(stages, parts, active_sets, rows, columns)
    dominant, value = _dominant(account(stages, parts, active_sets, rows, columns, corner))
    unbounded = corner == UNBOUNDED
    if unbounded.any():
        undoing = _undoing(stages, parts, active_sets, rows, columns)
        dominant = np.where(unbounded, undoing, dominant)
        value[unbounded] = np.nan
        worst[unbounded] = np.nan
    outcome.error_worst[rows, columns] = worst
    outcome.corner[rows, columns] = corner
    outcome.dominant[rows, columns] = dominant
    outcome.dominant_value[rows, columns] = value


def _nominal(stages: StageSide, parts: PartSide, rows: slice, columns: slice) -> FloatArray:
    monomials = parts.nominal[:, columns]
    numerator = _sum_of_products(stages.contrasts[:, rows], monomials)
    denominator = 1.0 + _sum_of_products(stages.loadings[:, rows], monomials)
    e = stages.set_point[rows, None]
    return np.where(denominator > 0.0, e + (1.0 + e) * (numerator / denominator), np.nan)


def _sum_of_products(left: FloatArray, right: FloatArray) -> FloatArray:
    """sum_k left[k, :, None] * right[k, None, :], in the order of k."""
    total = np.zeros((left.shape[1], right.shape[1]))
    for row, column in zip(left, right, strict=True):
        total += row[:, None] * column
    return total


def _worst(
    stages: StageSide, parts: PartSide, active_sets: Sequence[Sequence[int]], rows: slice, columns: slice
) -> tuple[FloatArray, NDArray[np.int32]]:
    """The error of largest magnitude over all corners, and the first corner that gives it."""
    monomials = parts.worst[:, columns]
    contrasts, loadings = stages.corner_contrasts[:, :, rows], stages.corner_loadings[:, :, rows]
    errors = stages.corner_error[:, rows, None]
    shape = (errors.shape[1], monomials.shape[1])
    magnitude, worst = np.full(shape, -1.0), np.zeros(shape)
    corner = np.zeros(shape, np.int32)
    numerator, denominator, scratch = np.empty(shape), np.empty(shape), np.empty(shape)
    larger = np.empty(shape, dtype=bool)
    bounded = np.repeat(stages.regular[rows, None], shape[1], axis=1)
    # 1 + sum d m stays positive by itself where no loading is negative.
    may_vanish = bool((loadings < 0.0).any())

    for j in range(len(errors)):
        e = errors[j]
        for q, active in enumerate(active_sets):
            numerator[:] = 0.0
            denominator[:] = 1.0
            for k in active:
                numerator += np.multiply(contrasts[j, k][:, None], monomials[k], out=scratch)
                denominator += np.multiply(loadings[j, k][:, None], monomials[k], out=scratch)
            if may_vanish:
                bounded &= denominator > 0.0
            numerator /= denominator
            numerator *= 1.0 + e
            numerator += e
            np.abs(numerator, out=scratch)
            np.greater(scratch, magnitude, out=larger)
            np.maximum(magnitude, scratch, out=magnitude)  # nan stays: a corner that overflows bounds nothing
            np.copyto(worst, numerator, where=larger)
            np.copyto(corner, j * len(active_sets) + q, where=larger)
    corner[~bounded | ~np.isfinite(magnitude)] = UNBOUNDED
    return worst, corner


def account(
    stages: StageSide,
    parts: PartSide,
    active_sets: Sequence[Sequence[int]],
    rows: slice,
    columns: slice,
    corner: NDArray[np.int32],
) -> Iterator[FloatArray]:
    """The terms of each pair's error at its corner, one array of shape (rows, columns) after the other.

    They come in the order of `corners.term_names` and sum to the error. Where the corner is `UNBOUNDED` they
    mean nothing.
    """
    j, q = np.divmod(np.maximum(corner, 0), len(active_sets))
    s = np.arange(*rows.indices(len(stages.limits)))[:, None]
    yield np.broadcast_to(stages.set_point[s], corner.shape)
    for element in range(stages.corner_terms.shape[1]):
        yield stages.corner_terms[j, element, s]

    is_active = np.zeros((len(active_sets), len(parts.worst)))
    for place, active in enumerate(active_sets):
        is_active[place, list(active)] = 1.0
    monomials = parts.worst[:, columns]
    denominator = np.ones(corner.shape)
    for k, monomial in enumerate(monomials):
        denominator += stages.corner_loadings[j, k, s] * (is_active[q, k] * monomial)
    lift = (1.0 + stages.corner_error[j, s]) / denominator
    for k, monomial in enumerate(monomials):
        yield lift * (stages.corner_contrasts[j, k, s] * (is_active[q, k] * monomial))


def nominal_account(stages: StageSide, parts: PartSide) -> Iterator[FloatArray]:
    """The terms of each pair's nominal error, each of shape (stages, parts), in the order of `account`."""
    shape = (len(stages.limits), parts.nominal.shape[1])
    yield np.broadcast_to(stages.set_point[:, None], shape)
    for _ in range(stages.corner_terms.shape[1]):
        yield np.zeros(shape)
    denominator = 1.0 + _sum_of_products(stages.loadings, parts.nominal)
    lift = (1.0 + stages.set_point[:, None]) / denominator
    for contrast, monomial in zip(stages.contrasts, parts.nominal, strict=True):
        yield lift * (contrast[:, None] * monomial)


def _dominant(terms: Iterator[FloatArray]) -> tuple[NDArray[np.int16], FloatArray]:
    """Place and value of the term of largest magnitude, the first of equals."""
    value = next(terms).copy()
    magnitude = np.abs(value)
    dominant = np.zeros(value.shape, np.int16)
    for place, term in enumerate(terms, start=1):
        larger = np.abs(term) > magnitude
        np.copyto(magnitude, np.abs(term), where=larger)
        np.copyto(value, term, where=larger)
        np.copyto(dominant, place, where=larger)
    return dominant, value


def _undoing(
    stages: StageSide, parts: PartSide, active_sets: Sequence[Sequence[int]], rows: slice, columns: slice
) -> NDArray[np.int16]:
    """Place of the term whose loading pulls the denominator furthest below one."""
    first = 1 + stages.corner_terms.shape[1]
    lowest = np.zeros((rows.stop - rows.start, columns.stop - columns.start))
    place = np.full(lowest.shape, first, np.int16)
    for k, monomial in enumerate(parts.worst[:, columns]):
        pull = stages.corner_loadings[:, k, rows].min(axis=0)[:, None] * monomial
        lower = pull < lowest
        np.copyto(lowest, pull, where=lower)
        np.copyto(place, first + k, where=lower)
    return place
