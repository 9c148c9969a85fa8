"""Which corners of stages and parts to visit: where a variable's direction is proved one of its ends, else both."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from itertools import chain, product

import numpy as np
from numpy.typing import NDArray

from gainassay.errors import InputError
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.form import Form
from gainassay.screen.boxes import StageBox, of_members
from gainassay.screen.signs import FALLS, FIXED, OPEN, RISES, Reach, directions
from gainassay.screen.tracking import Slack, slack

Place = Callable[[tuple[bool, ...]], int]
"""The place of a corner of the part, from which of the form's departures are at their limits there."""

MOST_OPEN_ELEMENTS = 14
"""Beyond this the corners of one stage, two to that power, are too many to visit."""

MOST_OPEN_FIGURES = 12
"""The same of one part: as many as two amplifiers have, and more than three have of `departures.BASIC`."""


def bits(marked: Sequence[bool]) -> int:
    """The number whose bit i says whether the i-th is marked."""
    return sum(1 << index for index, is_marked in enumerate(marked) if is_marked)


@dataclass(frozen=True)
class Plan:
    """Stages that visit the same corners.

    Attributes
    ----------
    stages : ndarray of int
        Their places.
    corners : tuple[tuple[int, int], ...]
        Each a corner of the stage, counted from the stage's first, and the place of a corner of the part; none for
        stages that are not regular.
    """

    stages: NDArray[np.intp]
    corners: tuple[tuple[int, int], ...]


@dataclass(frozen=True)
class Known:
    """What is known of some stages before any corner is visited.

    Attributes
    ----------
    of : ndarray of int8, shape (elements + networks + departures, stages)
        As in `signs.Directions`; where nothing is proved of a stage, whatever moves is `OPEN`.
    box : StageBox
        The stages' box, in which the networks of `untied` stages do not track.
    untied : ndarray of bool, shape (stages,)
    slack : Slack or None
        How far a gain may lie beyond its corners; none if no stage has a network that tracks.
    """

    of: NDArray[np.int8]
    box: StageBox
    untied: NDArray[np.bool_]
    slack: Slack | None


def what_is_known(form: Form, box: StageBox, reached: Reach | None) -> Known:
    """What is known of some stages from how far the departures of all parts reach."""
    untied = np.zeros(len(box.limits), dtype=bool)
    room: Slack | None = None
    if reached is None:
        return Known(everywhere(form, box), box, untied, room)
    found = directions(reached, box)
    tracks = box.common.moves().any(axis=0)
    if tracks.any():
        room = slack(reached, box)
        untied = tracks & ~(found.proved & np.isfinite(room.rises + room.falls).all(axis=(0, 1)))
        if untied.any():
            box, room = box.untied(untied), room.without(untied)
            found = directions(reached, box)
    return Known(np.where(found.proved, found.of, everywhere(form, box)), box, untied, room)


def everywhere(form: Form, box: StageBox) -> NDArray[np.int8]:
    """Directions that leave no corner out."""
    moves = np.concatenate([box.own.moves(), box.common.moves()])
    departures = np.full((len(form.departures), len(box.limits)), OPEN, np.int8)
    return np.concatenate([np.where(moves, np.int8(OPEN), np.int8(FIXED)), departures])


@dataclass(frozen=True)
class _Recipe:
    """The corners that follow from the directions of the variables.

    Attributes
    ----------
    ends : tuple[tuple[bool, ...], ...]
        The corners of the stage, the lower ends first: which elements and networks are at their upper ends.
    corners : tuple[tuple[int, int], ...]
        As in `Plan`.
    """

    ends: tuple[tuple[bool, ...], ...]
    corners: tuple[tuple[int, int], ...]


def _recipe(
    form: Form, place: Place, patterns: NDArray[np.int8], figures: Sequence[tuple[int, ...]], count: int
) -> _Recipe:
    """For the largest and for the smallest of each quantity, all ends of the variables of open direction."""
    found = set()
    for pattern in patterns:
        is_open = (pattern == OPEN).tolist()
        if sum(is_open[:count]) > MOST_OPEN_ELEMENTS:
            raise InputError(
                f"topology '{form.topology}': {sum(is_open[:count])} elements of a stage may each move "
                f"the gain either way; at most {MOST_OPEN_ELEMENTS} can be taken to every corner"
            )
        _refuse_too_many(form, sum(is_open[count + first] for first, *_ in figures))
        for extreme in (RISES, FALLS):
            choices = [
                (False, True) if unknown else (direction == extreme,)
                for direction, unknown in zip(pattern.tolist(), is_open, strict=True)
            ]
            element_ends = list(product(*choices[:count]))
            departure_sets = {place(at_limit) for at_limit in _at_limit(figures, choices[count:])}
            found |= {(ends[::-1], q) for ends in element_ends for q in departure_sets}
    # Ordered by the last element first, as the bits of a number are, then by the part's corner.
    ordered = sorted(found)
    stage_corners = sorted({ends for ends, _ in ordered})
    number = {ends: j for j, ends in enumerate(stage_corners)}
    return _Recipe(tuple(ends[::-1] for ends in stage_corners), tuple((number[ends], q) for ends, q in ordered))


def _at_limit(figures: Sequence[tuple[int, ...]], choices: Sequence[tuple[bool, ...]]) -> Iterator[tuple[bool, ...]]:
    """Which departures are at their limits, at each corner of the part that their choices leave."""
    ends = [
        # One with a sign is at an end where one of its two symbols is at the limit and the other 0.
        [(marked, not marked) for marked in choices[first]]
        if others and len(choices[first]) == 2
        else list(product(*(choices[place] for place in (first, *others))))
        for first, *others in figures
    ]
    return (tuple(chain.from_iterable(marks)) for marks in product(*ends))


def _refuse_too_many(form: Form, open_figures: int) -> None:
    if open_figures > MOST_OPEN_FIGURES:
        raise InputError(
            f"topology '{form.topology}': {open_figures} figures of its amplifiers may each move the gain of a stage "
            f"either way, or nothing is proved of it; at most {MOST_OPEN_FIGURES} can be taken to every corner. Leave "
            "the poorest parts out, or the columns of a quantity that matters least, such as r_icm or cmrr"
        )


@dataclass(frozen=True)
class Visited:
    """The corners that some stages visit, all stages' corners in a row.

    Attributes
    ----------
    stage : ndarray of int, shape (corners,)
    is_upper : ndarray of bool, shape (elements + networks, corners)
        Whether an element, or what a network has in common, is at its upper end; what does not move is not.
    first : ndarray of int, shape (stages,)
        Where the corners of each stage begin.
    plans : tuple[Plan, ...]
        Every stage is in one of them.
    """

    stage: NDArray[np.intp]
    is_upper: NDArray[np.bool_]
    first: NDArray[np.intp]
    plans: tuple[Plan, ...]


def visit(form: Form, known: NDArray[np.int8], place: Place, figures: Sequence[tuple[int, ...]], count: int) -> Visited:
    """The corners to visit, from what is known of each stage.

    Parameters
    ----------
    known : ndarray of int8, shape (quantities, variables, stages)
        As in `signs.Directions`, for each quantity whose extremes are looked for.
    figures : sequence of tuples of int
        The variables of the part that are one quantity, as `Form.figures` gives them.
    count : int
        Of the variables how many, the first, belong to the stage.

    Raises
    ------
    InputError
        If more elements may move the gain either way than can be visited corner by corner.
    """
    # Two of the same pattern visit the same corners; there are few patterns.
    patterns, pattern_of = np.unique(known, axis=2, return_inverse=True)
    pattern_of = pattern_of.reshape(-1)
    recipes = [_recipe(form, place, pattern, figures, count) for pattern in np.moveaxis(patterns, 2, 0)]
    counts = np.array([len(recipe.ends) for recipe in recipes], np.intp)[pattern_of]
    first = np.concatenate([[0], np.cumsum(counts)[:-1]])
    stage = np.repeat(np.arange(len(counts)), counts)
    is_upper = np.empty((count, len(stage)), dtype=bool)
    plans: dict[tuple[tuple[int, int], ...], list[NDArray[np.intp]]] = {}
    for number, recipe in enumerate(recipes):
        members = np.flatnonzero(pattern_of == number)
        plans.setdefault(recipe.corners, []).append(members)
        for j, ends in enumerate(recipe.ends):
            is_upper[:, first[members] + j] = np.array(ends, dtype=bool)[:, None]
    return Visited(
        stage,
        is_upper,
        first,
        tuple(Plan(np.sort(np.concatenate(members)), corners) for corners, members in plans.items()),
    )


@dataclass(frozen=True)
class Factors:
    """Factors on the nominal values at some corners, each of shape (moves, elements, corners).

    Attributes
    ----------
    own, together : ndarray
        By which each element moves alone, and with its network.
    """

    own: FloatArray
    together: FloatArray


def factors_at(box: StageBox, stage: NDArray[np.intp], is_upper: NDArray[np.bool_]) -> Factors:
    """The factors at corners, from the stage of each and which elements and networks are at their upper ends."""
    elements = len(box.values)

    def at_ends(low: FloatArray, high: FloatArray, upper: NDArray[np.bool_]) -> FloatArray:
        return np.where(upper, high[:, :, stage], low[:, :, stage])

    own = at_ends(box.own.low, box.own.high, is_upper[:elements])
    common = at_ends(box.common.low, box.common.high, is_upper[elements:])
    return Factors(own, of_members(box.network[:, stage], common))


def with_a_bound(plans: tuple[Plan, ...], regular: NDArray[np.bool_]) -> tuple[Plan, ...]:
    """The plans of regular stages, and one without corners for the others: no part gives these a bound."""
    kept = [Plan(plan.stages[regular[plan.stages]], plan.corners) for plan in plans]
    return tuple(plan for plan in (*kept, Plan(np.flatnonzero(~regular), ())) if len(plan.stages))
