"""What each stage of a job asks of a part: a line of a specification, or why no part can pass."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from gainassay.contracts.evidence import MISSING
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.departures import DEPARTURES, OPEN_LOOP_GAIN
from gainassay.runs import summaries
from gainassay.runs.tables import summary_table
from gainassay.screen import blocks
from gainassay.screen.blocks import Group
from gainassay.screen.boxes import StageBox
from gainassay.screen.methods import AT_FREQUENCY, CALIBRATED
from gainassay.screen.need import Asked, bearable, bearable_spread, figure, needed, paired_errors, passing
from gainassay.screen.verdicts import Rules

OUTLOOKS = ("met", "unproven", "unmet", "hopeless")
"""How a stage stands, the best first; `schemas/need.table.json` says what each means."""

PER_CENT = 1e2
GAIN = DEPARTURES.index(OPEN_LOOP_GAIN)


def specify(
    groups: Sequence[Group], rules: Rules, workers: int, after_each: Callable[[int], None] | None = None
) -> pa.Table:
    """The need table of a job.

    Every number is put back before it is told: the part that just meets it is taken through the worst case. Of
    calibrated stages, whose errors come from changes and not from limits alone, none is found, nor at a frequency.
    All is about the gain: operating limits and the phase margin are left out.

    Parameters
    ----------
    workers, after_each
        As in `blocks.run`.
    """
    rules = replace(rules, phase_margin=None)
    groups = [replace(group, bounds=group.bounds.unknown()) for group in groups]
    tallies = [tally for _, tally in blocks.run(groups, rules, lambda *_: None, workers, after_each=after_each)]
    summary = summaries.stage_summary(groups, tallies)
    stages, best = (np.array(summary.column(name).to_pylist(), np.str_) for name in ("stage", "best_part"))
    is_outside = (summary.column("pass").to_numpy() + summary.column("unproven").to_numpy()) == 0
    found = {name: np.full(len(stages), np.nan) for name in _columns(groups)}
    is_calibrated, is_tuned = np.zeros((2, len(stages)), dtype=bool)
    for group in groups:
        at = np.searchsorted(stages, group.stage_names)
        is_calibrated[at], is_tuned[at] = group.method is CALIBRATED, group.method is AT_FREQUENCY
        if not group.method.has_more:
            continue
        for name, values in _of_group(group, best[at], is_outside[at], rules).items():
            found[name][at] = values
    allowed = summary.column("limit_ppm").to_numpy() * (1.0 - rules.guard_band)
    excess = np.abs(summary.column("error_elements_ppm").to_numpy()) - allowed
    columns = {
        "stage": summary.column("stage"),
        "topology": summary.column("topology"),
        "outlook": pa.array(_outlook(summary, np.isnan(found["floor_a_ol"]) & ~is_calibrated & ~is_tuned), pa.string()),
        "calibrated": pa.array(is_calibrated.tolist()),
        "at_frequency": pa.array(is_tuned.tolist()),
        "limit_ppm": summary.column("limit_ppm"),
        "allowed_ppm": allowed,
        "error_elements_ppm": summary.column("error_elements_ppm"),
        "excess_ppm": np.where(excess > 0.0, excess, np.nan),
        "floor_a_ol": found.pop("floor_a_ol"),
        "part": summary.column("best_part"),
        "limit_used": summary.column("best_limit_used"),
        **found,
    }
    return summary_table(
        "need",
        {
            name: pa.array(values, mask=~np.isfinite(values)) if isinstance(values, np.ndarray) else values
            for name, values in columns.items()
        },
    )


def _columns(groups: Sequence[Group]) -> tuple[str, ...]:
    """Columns of the need table that are found for each group."""
    asked = [departure for departure in DEPARTURES if any(group.form.has(departure) for group in groups)]
    return (
        "floor_a_ol",
        *(f"{verb}_{departure.quantity}" for departure in asked for verb in ("has", "need")),
        *("tolerance_pct", "tolerance_ideal_pct", "tolerance_part_pct"),
    )


def counts(table: pa.Table) -> dict[str, int]:
    """Stages of a need table by outlook."""
    outlooks = table.column("outlook").to_pylist()
    return {outlook: outlooks.count(outlook) for outlook in OUTLOOKS}


def _outlook(summary: pa.Table, is_hopeless: NDArray[np.bool_]) -> list[str]:
    passes, leans = (summary.column(verdict).to_numpy() > 0 for verdict in ("pass", "unproven"))
    place = np.select([passes, leans, ~is_hopeless], range(3), 3)
    return [OUTLOOKS[code] for code in place.tolist()]


def _of_group(
    group: Group, best: NDArray[np.str_], is_outside: NDArray[np.bool_], rules: Rules
) -> dict[str, FloatArray]:
    """Columns of the need table, each of shape (stages,), for stages with their best parts.

    Parameters
    ----------
    best : ndarray of str, shape (stages,)
        Names of parts; empty where no part has a finite bound.
    is_outside : ndarray of bool, shape (stages,)
        Whether even the best part is outside the limit.
    """
    box = passing(group.box, rules)
    is_there = best != ""
    place = np.where(is_there, np.searchsorted(group.part_names, best), 0)
    has = np.where(is_there, group.parts.limits[:, place], np.nan)
    is_known = is_there & (group.parts.evidence[:, place] != MISSING)
    floor = _floor(group, box)
    need = _needed(group, box, has, is_there)
    columns = {"floor_a_ol": floor}
    for kind, departure in enumerate(DEPARTURES):
        if not group.form.has(departure):
            continue
        columns[f"has_{departure.quantity}"] = np.where(is_known[kind], figure(departure, has[kind]), np.nan)
        columns[f"need_{departure.quantity}"] = need[kind]
    loosest = _loosest(group)
    ideal_factor = _spread(group, box, np.zeros_like(has), np.isnan(floor))
    part_factor = _spread(group, box, has, is_outside & is_there)
    return columns | {
        "tolerance_pct": loosest,
        "tolerance_ideal_pct": loosest * ideal_factor,
        "tolerance_part_pct": loosest * part_factor,
    }


def _needed(group: Group, box: StageBox, has: FloatArray, where: NDArray[np.bool_]) -> FloatArray:
    """What some stages need of their best parts; shape (departures, stages), nan elsewhere."""
    need = np.full_like(has, np.nan)
    rows = np.flatnonzero(where)
    if len(rows):
        need[:, rows] = needed(Asked(group.form, box.part(rows), has[:, rows, None], group.parts.limits))[:, :, 0]
    for kind in range(len(DEPARTURES)):
        _put_back(group, box, kind, has, need[kind])
    return need


def _floor(group: Group, box: StageBox) -> FloatArray:
    """The least open-loop gain of a part that is ideal but for it; shape (stages,)."""
    ideal = np.zeros((len(DEPARTURES), len(box.limits)))
    table = np.zeros_like(group.parts.limits)
    table[GAIN] = group.parts.limits[GAIN]
    floor = figure(OPEN_LOOP_GAIN, bearable(Asked(group.form, box, ideal[:, :, None], table), GAIN))[:, 0]
    _put_back(group, box, GAIN, ideal, floor)
    return floor


def _put_back(group: Group, box: StageBox, kind: int, has: FloatArray, need: FloatArray) -> None:
    """See that the parts pass if one of their figures is what was found; shapes (departures, stages), (stages,)."""
    rows = np.flatnonzero(np.isfinite(need))
    worst = has[:, rows]
    worst[kind] = figure(DEPARTURES[kind], need[rows])
    errors = np.abs(paired_errors(group.form, box.part(rows), worst))
    failed = rows[~(errors <= box.limits[rows])]
    if len(failed):
        stage, quantity = group.stage_names[failed[0]], DEPARTURES[kind].quantity
        raise RuntimeError(f"stage {stage!r} fails with the {quantity} that it was found to need")


def _loosest(group: Group) -> FloatArray:
    """By how much each stage's loosest resistor may be off, all that moves it together [%]."""
    _, high = group.box.at_dc(group.form.kinds).ends()
    return np.asarray(PER_CENT * (high - 1.0).max(axis=0))


def _spread(group: Group, box: StageBox, has: FloatArray, where: NDArray[np.bool_]) -> FloatArray:
    """The factor by which some stages' tolerances would have to shrink for their parts to pass; nan elsewhere."""
    factor = np.full(len(where), np.nan)
    rows = np.flatnonzero(where)
    if len(rows):
        factor[rows] = bearable_spread(Asked(group.form, box.part(rows), has[:, rows, None], group.parts.limits))
    return factor
