"""The numeric screen of stages against parts: whole-array operations, nothing symbolic, no loop over pairs.

With c = n_k - d_k and d = d_k of the stages and the products m_k of the parts, for all pairs at once,

    E = sum_k c_k m_k / (1 + sum_k d_k m_k),    error = e + (1 + e) E,

e being the error of the ideal gain. Sums run over k in a fixed order, one multiply and one add each, so that
no bit of a result depends on how the pairs were cut into blocks (a library's matrix product does not promise
that).
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import reduce
from typing import Any

import numpy as np
from numpy.typing import NDArray

from gainassay.forms.coefficients import FloatArray
from gainassay.screen.corners import PartSide, StageSide
from gainassay.screen.tracking import excess
from gainassay.screen.visits import Plan

PAIRS_PER_BLOCK = 32_768
"""Pairs evaluated at a time: enough that Python's own time does not count, few enough to stay in the cache."""

NO_TERM = -1
"""Stands for the dominant term where no term differs from 0."""

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
    beyond : ndarray or None
        The part of the error by which it may lie beyond that corner, since networks track; none for all pairs.
    phase, hertz : ndarray or None
        At a frequency, the phase error of largest magnitude [degree], and where the worst error lies [Hz].
    """

    error_nominal: FloatArray
    error_worst: FloatArray
    corner: NDArray[np.int32]
    dominant: NDArray[np.int16]
    dominant_value: FloatArray
    beyond: FloatArray | None = None
    phase: FloatArray | None = None
    hertz: FloatArray | None = None


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
        np.full(shape, UNBOUNDED, np.int32),  # of stages that no plan visits nothing else is filled in
        np.empty(shape, np.int16),
        np.empty(shape),
    )
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        for plan, rows, columns in in_blocks(stages, shape[1], block):
            _screen_block(stages, parts, active_sets, plan.corners, rows, columns, outcome)
        return outcome if stages.slack is None else _with_what_lies_beyond(stages, parts, active_sets, outcome)


def beyond_corners(stages: StageSide, parts: PartSide, error: FloatArray) -> FloatArray:
    """By how much errors may lie beyond those at the corners, between the ends of networks' common factors.

    It is nan where nothing bounds them.
    Not below what either the largest or the smallest gain may go beyond its corner: of these the one with the smaller
    error in magnitude is multiplied by no more.
    """
    if stages.slack is None:
        return np.zeros(error.shape)
    beyond = (1.0 + np.abs(error)) * np.expm1(excess(stages.slack, parts.limits))
    return np.where(np.isfinite(beyond), np.copysign(beyond, error), np.nan)


def _with_what_lies_beyond(
    stages: StageSide, parts: PartSide, active_sets: Sequence[Sequence[int]], outcome: Outcome
) -> Outcome:
    beyond = beyond_corners(stages, parts, outcome.error_worst)
    np.copyto(outcome.corner, UNBOUNDED, where=np.isnan(beyond))
    np.copyto(outcome.dominant_value, np.nan, where=np.isnan(beyond))
    widened = replace(outcome, error_worst=outcome.error_worst + beyond, beyond=beyond)
    every = slice(None)
    find_dominant(account(stages, parts, active_sets, every, every, widened), widened)
    return widened


def find_dominant(terms: Iterable[FloatArray], outcome: Outcome) -> None:
    """Fill in the term of largest magnitude of each pair, the first of equals; not of those without a finite bound."""
    bounded = outcome.corner != UNBOUNDED
    for place, term in enumerate(terms):
        larger = bounded & (np.abs(term) > (np.abs(outcome.dominant_value) if place else -1.0))
        np.copyto(outcome.dominant, place, where=larger)
        np.copyto(outcome.dominant_value, term, where=larger)


def nominal_errors(stages: StageSide, parts: PartSide, block: int = PAIRS_PER_BLOCK) -> FloatArray:
    """The `error_nominal` of `screen` alone."""
    found = np.empty((len(stages.limits), parts.worst.shape[1]))
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        for _, rows, columns in in_blocks(stages, found.shape[1], block):
            found[rows, columns] = _nominal(stages, parts, rows, columns)
    return found


def worst_errors(
    stages: StageSide, parts: PartSide, active_sets: Sequence[Sequence[int]], block: int = PAIRS_PER_BLOCK
) -> tuple[FloatArray, NDArray[np.int32]]:
    """The `error_worst` and the `corner` of `screen` alone; where the corner is `UNBOUNDED` the error is nan."""
    found = np.empty((len(stages.limits), parts.worst.shape[1]))
    corner = np.empty(found.shape, np.int32)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        for plan, rows, columns in in_blocks(stages, found.shape[1], block):
            found[rows, columns], corner[rows, columns] = _worst(
                stages, parts, active_sets, plan.corners, rows, columns
            )
    if stages.slack is not None:
        found += beyond_corners(stages, parts, found)
        np.copyto(corner, UNBOUNDED, where=np.isnan(found))
    return found, corner


def in_blocks(stages: StageSide, parts: int, block: int) -> Iterator[tuple[Plan, NDArray[np.intp], slice]]:
    """Blocks of pairs whose stages visit the same corners."""
    for plan in stages.plans:
        for rows, columns in cut((len(plan.stages), parts), block):
            yield plan, plan.stages[rows], columns


def cut(shape: tuple[int, int], block: int) -> Iterator[tuple[slice, slice]]:
    """Rows and columns of the blocks that pairs are cut into."""
    width = max(1, min(shape[1], block))
    height = max(1, block // width)
    for top in range(0, shape[0], height):
        for left in range(0, shape[1], width):
            yield slice(top, min(top + height, shape[0])), slice(left, min(left + width, shape[1]))


def _screen_block(
    stages: StageSide,
    parts: PartSide,
    active_sets: Sequence[Sequence[int]],
    corners: Sequence[tuple[int, int]],
    rows: NDArray[np.intp],
    columns: slice,
    outcome: Outcome,
) -> None:
    outcome.error_nominal[rows, columns] = _nominal(stages, parts, rows, columns)
    worst, corner = _worst(stages, parts, active_sets, corners, rows, columns)
    dominant, value = _dominant(stages, parts, active_sets, corners, rows, columns, corner)
    unbounded = corner == UNBOUNDED
    if unbounded.any():
        dominant = np.where(unbounded, undoing(stages, parts, rows, columns), dominant)
        value[unbounded] = np.nan
    outcome.error_worst[rows, columns] = worst
    outcome.corner[rows, columns] = corner
    outcome.dominant[rows, columns] = dominant
    outcome.dominant_value[rows, columns] = value


def _nominal(stages: StageSide, parts: PartSide, rows: NDArray[np.intp], columns: slice) -> FloatArray:
    products = parts.nominal[:, columns]
    numerator, denominator = np.zeros((2, len(rows), products.shape[1]))
    denominator += 1.0
    add_products(stages.contrasts[:, rows, None], stages.loadings[:, rows, None], products, numerator, denominator)
    may_vanish = bool((stages.loadings[:, rows] < 0.0).any())
    e = stages.set_point[rows, None]
    error = e + (1.0 + e) * (numerator / denominator)
    return np.where(denominator > 0.0, error, np.nan) if may_vanish else error


def add_products(
    contrasts: FloatArray, loadings: FloatArray, products: FloatArray, numerator: FloatArray, denominator: FloatArray
) -> None:
    """Add sum_k contrasts[k] * products[k] to the numerator, and so for the loadings, in the order of k."""
    scratch = np.empty_like(numerator)
    for contrast, loading, factor in zip(contrasts, loadings, products, strict=True):
        if contrast.any():
            numerator += np.multiply(contrast, factor, out=scratch)
        if loading.any():
            denominator += np.multiply(loading, factor, out=scratch)


def _worst(
    stages: StageSide,
    parts: PartSide,
    active_sets: Sequence[Sequence[int]],
    corners: Sequence[tuple[int, int]],
    rows: NDArray[np.intp],
    columns: slice,
) -> tuple[FloatArray, NDArray[np.int32]]:
    """The error of largest magnitude over the corners, and the first corner that gives it."""
    products = parts.worst[:, columns]
    shape = (len(rows), products.shape[1])
    if not corners:
        return np.full(shape, np.nan), np.full(shape, UNBOUNDED, np.int32)
    worst, magnitude = np.empty(shape), np.empty(shape)
    corner, mark = np.empty(shape, np.int32), np.empty(shape, np.int32)
    numerator, denominator, scratch = np.empty(shape), np.empty(shape), np.empty(shape)
    larger = np.empty(shape, dtype=bool)
    bounded: NDArray[np.bool_] | None = None  # where it matters

    for place, (j, q) in enumerate(corners):
        active = list(active_sets[q])
        at = stages.first[rows] + j
        e = stages.corner_error[at, None]
        if active:
            contrasts, loadings = stages.corner_contrasts[active][:, at], stages.corner_loadings[active][:, at]
            numerator[:] = 0.0
            denominator[:] = 1.0
            add_products(contrasts[..., None], loadings[..., None], products[active], numerator, denominator)
            # 1 + sum d m stays positive by itself where no loading is negative.
            if (loadings < 0.0).any():
                bounded = denominator > 0.0 if bounded is None else bounded & (denominator > 0.0)
            numerator /= denominator
            numerator *= 1.0 + e
            numerator += e
        error = numerator if active else e
        size = np.abs(error, out=scratch) if active else np.abs(e)
        code = j * len(active_sets) + q
        if place:
            np.greater(size, magnitude, out=larger)
            np.maximum(magnitude, size, out=magnitude)  # nan stays: a corner that overflows bounds nothing
            put(worst, error, larger)
            # Codes rise from corner to corner: the largest is the last that exceeded all before it.
            np.maximum(corner, np.multiply(larger.view(np.int8), np.int32(code), out=mark), out=corner)
        else:
            magnitude[:], worst[:], corner[:] = size, error, code
    unbounded = ~np.isfinite(magnitude)
    if bounded is not None:
        unbounded |= ~bounded
    if unbounded.any():
        worst[unbounded] = np.nan
        corner[unbounded] = UNBOUNDED
    return worst, corner


def account(
    stages: StageSide,
    parts: PartSide,
    active_sets: Sequence[Sequence[int]],
    rows: slice,
    columns: slice,
    outcome: Outcome,
) -> Iterator[FloatArray]:
    """The terms of each pair's error at its corner, one array of shape (rows, columns) after the other.

    They come in the order of `corners.term_names` and sum to the error. Where the corner is `UNBOUNDED` they
    mean nothing.
    """
    corner = outcome.corner[rows, columns]
    j, q = np.divmod(np.maximum(corner, 0), len(active_sets))
    s = np.arange(*rows.indices(len(stages.limits)))[:, None]
    at = stages.first[s] + j
    yield np.broadcast_to(stages.set_point[s], corner.shape)
    *alone, together = stages.corner_terms
    for shares in alone:
        yield shares[at]
    yield together[at] if outcome.beyond is None else together[at] + outcome.beyond[rows, columns]

    visited = np.flatnonzero(np.bincount(q.ravel()))
    is_active = np.zeros((len(parts.worst), len(visited)))
    for place, code in enumerate(visited.tolist()):
        is_active[list(active_sets[code]), place] = 1.0
    q = np.searchsorted(visited, q)
    products = parts.worst[:, columns]
    denominator = np.ones(corner.shape)
    for k, factor in enumerate(products):
        denominator += stages.corner_loadings[k][at] * (is_active[k][q] * factor)
    lift = (1.0 + stages.corner_error[at]) / denominator
    for term in summed(stages.accounts, lambda k: stages.corner_contrasts[k][at] * (is_active[k][q] * products[k])):
        yield lift * term


def summed(accounts: Sequence[Sequence[int]], of_product: Callable[[int], FloatArray]) -> Iterator[FloatArray]:
    """Of each term of the part's account what its products m_k give, added in their order."""
    for products in accounts:
        yield reduce(np.add, map(of_product, products))


def nominal_account(stages: StageSide, parts: PartSide) -> Iterator[FloatArray]:
    """The terms of each pair's nominal error, each of shape (stages, parts), in the order of `account`."""
    shape = (len(stages.limits), parts.nominal.shape[1])
    yield np.broadcast_to(stages.set_point[:, None], shape)
    for _ in stages.corner_terms:
        yield np.zeros(shape)
    numerator, denominator = np.zeros(shape), np.ones(shape)
    add_products(stages.contrasts[..., None], stages.loadings[..., None], parts.nominal, numerator, denominator)
    lift = (1.0 + stages.set_point[:, None]) / denominator
    for term in summed(stages.accounts, lambda k: stages.contrasts[k][:, None] * parts.nominal[k]):
        yield lift * term


def _dominant(
    stages: StageSide,
    parts: PartSide,
    active_sets: Sequence[Sequence[int]],
    corners: Sequence[tuple[int, int]],
    rows: NDArray[np.intp],
    columns: slice,
    corner: NDArray[np.int32],
) -> tuple[NDArray[np.int16], FloatArray]:
    """Place, in the account, and value of the term of largest magnitude at each pair's corner, the first of equals.

    The same numbers as `account` gives, one corner after the other: there each coefficient is the same for a
    whole row, and those of set-point and tolerances do not depend on the part.
    """
    dominant, value = np.zeros(corner.shape, np.int16), np.zeros(corner.shape)
    for j, q in corners:
        is_here = corner == j * len(active_sets) + q
        if is_here.any():
            at = stages.first[rows] + j
            place, largest = _dominant_at(stages, parts, list(active_sets[q]), at, stages.set_point[rows], columns)
            if is_here.all():
                return place, largest
            put(dominant, place, is_here)
            put(value, largest, is_here)
    return dominant, value


def _dominant_at(
    stages: StageSide,
    parts: PartSide,
    active: list[int],
    at: NDArray[np.intp],
    set_point: FloatArray,
    columns: slice,
) -> tuple[NDArray[np.int16], FloatArray]:
    """The dominant terms of some stages if every pair were at the corner `at`, with these products active."""
    products = parts.worst[:, columns]
    shape = (len(at), products.shape[1])
    # Terms that do not depend on the part stand first in the account: each row begins with the largest of them.
    constant = np.vstack([set_point, stages.corner_terms[:, at]])
    first = np.abs(constant).argmax(axis=0)
    start = constant[first, np.arange(len(at))]
    if not active:
        places, values = np.empty(shape, np.int16), np.empty(shape)
        places[:], values[:] = first[:, None], start[:, None]
        return places, values

    contrasts, loadings = stages.corner_contrasts[active][:, at], stages.corner_loadings[active][:, at]
    lift, size, larger = np.ones(shape), np.empty(shape), np.empty(shape, dtype=bool)
    for k, loading in zip(active, loadings, strict=True):
        if loading.any():
            lift += np.multiply(loading[:, None], products[k], out=size)
    raised = 1.0 + stages.corner_error[at]
    np.divide(np.abs(raised)[:, None], lift, out=lift)
    magnitude, found, mark = np.empty(shape), np.empty(shape, np.int16), np.empty(shape, np.int16)
    magnitude[:] = np.abs(start)[:, None]
    # A term's sign is carried as the last bit of the term's place.
    found[:] = (2 * first + np.signbit(start))[:, None]
    of_product = {k: contrast for k, contrast in zip(active, contrasts, strict=True) if contrast.any()}
    for place, members in enumerate(stages.accounts, 1 + len(stages.corner_terms)):
        inside = {k: of_product[k] for k in members if k in of_product}
        if inside:
            is_negative = _magnitude(inside, products, size)
            np.multiply(lift, size, out=size)
            np.greater(size, magnitude, out=larger)
            np.maximum(magnitude, size, out=magnitude)
            code = 2 * place + (is_negative ^ (raised < 0.0)[:, None])
            # Places rise: the largest is the last that exceeded all before it, so the first of the largest.
            np.maximum(found, np.multiply(larger.view(np.int8), code.astype(np.int16), out=mark), out=found)
    np.multiply(magnitude, 1 - 2 * (found & 1), out=magnitude)
    return found >> 1, magnitude


def _magnitude(contrasts: Mapping[int, FloatArray], products: FloatArray, size: FloatArray) -> NDArray[np.bool_]:
    """Fill in the magnitude of the sum of some products m_k with their contrasts.

    Returns
    -------
    ndarray of bool, shape (rows, 1) or (rows, columns)
        Whether the sum is negative: of one product all along a row.
    """
    (first, contrast), *more = contrasts.items()
    if not more:
        np.multiply(np.abs(contrast)[:, None], products[first], out=size)
        return np.asarray(np.signbit(contrast)[:, None])
    total = reduce(np.add, (contrast[:, None] * products[k] for k, contrast in contrasts.items()))
    np.abs(total, out=size)
    return np.asarray(np.signbit(total))


def put(target: NDArray[Any], source: NDArray[Any], where: NDArray[np.bool_]) -> None:
    """target[where] = source[where], without branches: for an irregular mask several times as fast as copying."""
    integer = {2: np.int16, 8: np.int64}[target.itemsize]
    bits = target.view(integer)
    change = np.bitwise_xor(bits, source.view(integer))
    change &= np.negative(where.view(np.int8)).astype(integer)
    bits ^= change


def undoing(stages: StageSide, parts: PartSide, rows: NDArray[np.intp], columns: slice) -> NDArray[np.int16]:
    """Place of the term with the product whose loading pulls the denominator furthest below one."""
    first = 1 + len(stages.corner_terms)
    term_of = {k: term for term, members in enumerate(stages.accounts) for k in members}
    end = np.append(stages.first[1:], stages.corner_loadings.shape[1])
    lowest_loading = np.array([stages.corner_loadings[:, stages.first[s] : end[s]].min(axis=1) for s in rows]).T
    products = parts.worst[:, columns]
    lowest = np.zeros((len(rows), products.shape[1]))
    place = np.full(lowest.shape, first, np.int16)
    for k, (loading, factor) in enumerate(zip(lowest_loading, products, strict=True)):
        pull = loading[:, None] * factor
        lower = pull < lowest
        np.copyto(lowest, pull, where=lower)
        np.copyto(place, first + term_of[k], where=lower)
    return place
