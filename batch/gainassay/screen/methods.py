"""The ways in which stages are screened: at 0 Hz, calibrated, at a frequency. Each is a table of what it does where."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

from gainassay.forms.coefficients import FloatArray
from gainassay.forms.departures import FIGURES, PLACE
from gainassay.forms.form import Form
from gainassay.screen import at_frequency, calibrated, corners, kernel, response, spots
from gainassay.screen.boxes import StageBox
from gainassay.screen.corners import PartSide, StageSide, active_sets
from gainassay.screen.kernel import Outcome
from gainassay.screen.signs import Reach, reach
from gainassay.screen.spots import SpotSide

Side = Any
"""A `StageSide`, or a `SpotSide` of stages at a frequency; a method takes what it makes."""

Gains = tuple[FloatArray, FloatArray]
AtLimit = tuple[int, str]


@dataclass(frozen=True)
class Method:
    """A way in which stages are screened.

    Attributes
    ----------
    worst_case : str
        What its worst case is.
    has_more : bool
        Whether needs and the two more views are found.
    reach : callable
        What to keep of the whole table: how far it lets a search for corners reach.
    side, screen, elements_error : callable
        As `corners.stage_side`, `kernel.screen` and `corners.elements_error`.
    term_names, account, nominal_account : callable
        Names and values of the terms, at the worst corners and with nominal figures.
    gains : callable
        The ideal gain of each pair, and the gain that its errors refer to [gain unit].
    corner : callable
        The stage's and the part's corner that an outcome's `corner` stands for.
    at_limits : callable
        The form's departures, by place, and the quantities of theirs that are at their limits at a corner of the part;
        none of calibrated stages.
    """

    worst_case: str
    has_more: bool
    reach: Callable[[Form, PartSide, StageBox], Any]
    side: Callable[[Form, StageBox, Any], Side]
    screen: Callable[[Form, Side, PartSide, int], Outcome]
    elements_error: Callable[[Side], FloatArray]
    term_names: Callable[[Form], tuple[str, ...]]
    account: Callable[[Form, Side, PartSide, Outcome], Iterator[FloatArray]]
    nominal_account: Callable[[Form, Side, PartSide, Outcome], Iterator[FloatArray]]
    gains: Callable[[Form, Side, Outcome], Gains]
    corner: Callable[[Form, Side, int], tuple[int, int]]
    at_limits: Callable[[Form, Side, int], set[AtLimit]]


EVERY = slice(None)


def _reach(form: Form, parts: PartSide, box: StageBox) -> Reach:
    return reach(form, parts.limits, box.memberships())


def _gains(_: Form, stages: StageSide, outcome: Outcome) -> Gains:
    shape = outcome.corner.shape
    gain_ideal, reference = (np.broadcast_to(gain[:, None], shape) for gain in (stages.gain_ideal, stages.reference))
    return gain_ideal, reference


def _at_limits(form: Form, _: StageSide, place: int) -> set[AtLimit]:
    inside = {i for k in active_sets(form)[place] for i in form.monomials[k]}
    return {(i, FIGURES[PLACE[form.departures[i][1]]].quantity) for i in inside}


AT_DC = Method(
    worst_case="exact",
    has_more=True,
    reach=_reach,
    side=corners.stage_side,
    screen=lambda form, stages, parts, block: kernel.screen(stages, parts, active_sets(form), block),
    elements_error=corners.elements_error,
    term_names=corners.term_names,
    account=lambda form, stages, parts, outcome: kernel.account(
        stages, parts, active_sets(form), EVERY, EVERY, outcome
    ),
    nominal_account=lambda form, stages, parts, outcome: kernel.nominal_account(stages, parts),
    gains=_gains,
    corner=lambda form, stages, code: divmod(code, len(active_sets(form))),
    at_limits=_at_limits,
)

CALIBRATED = Method(
    worst_case="exact",
    has_more=False,
    reach=_reach,
    side=calibrated.stage_side,
    screen=calibrated.screen,
    elements_error=corners.elements_error,
    term_names=corners.term_names,
    account=lambda form, stages, parts, outcome: calibrated.account(form, stages, parts, EVERY, EVERY, outcome),
    nominal_account=lambda form, stages, parts, outcome: kernel.nominal_account(stages, parts),
    gains=_gains,
    corner=lambda form, stages, code: divmod(code, calibrated.corners_of_part(form)),
    at_limits=lambda form, stages, place: set(),
)


def _spot_limits(form: Form, stages: SpotSide, place: int) -> set[AtLimit]:
    ends = stages.part_corners[place]
    at_limit = (one for i, one in enumerate(response.variables(form)) if ends >> i & 1)
    return {(one.departure, FIGURES[one.place].quantity) for one in at_limit}


AT_FREQUENCY = Method(
    worst_case="vertex estimate",
    has_more=False,
    reach=lambda form, parts, box: parts.limits.max(axis=1),
    side=spots.stage_side,
    screen=at_frequency.screen,
    elements_error=at_frequency.elements_error,
    term_names=at_frequency.term_names,
    account=at_frequency.account,
    nominal_account=at_frequency.nominal_account,
    gains=at_frequency.gains,
    corner=lambda form, stages, code: divmod(code, len(stages.part_corners)),
    at_limits=_spot_limits,
)

METHODS = (AT_DC, CALIBRATED, AT_FREQUENCY)
WORST_CASES = tuple(dict.fromkeys(method.worst_case for method in METHODS))
