"""A topology's gain shortened to what matters over the stages and parts that a job screens."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from gainassay.contracts.documents import nearest
from gainassay.contracts.evidence import MISSING
from gainassay.errors import InputError
from gainassay.forms.cache import form_of, formulas_of
from gainassay.forms.departures import AT_DC, BASIC
from gainassay.forms.evaluation import value
from gainassay.forms.expression import Expression
from gainassay.forms.meaningful import Formulas
from gainassay.forms.shortening import Deviation, Shortened
from gainassay.forms.shortening import shorten as shorten_formula
from gainassay.forms.topology import Topology
from gainassay.screen.boxes import with_tolerances
from gainassay.screen.corners import part_side, stage_side
from gainassay.screen.kernel import nominal_errors
from gainassay.service import Prepared
from gainassay.tables.eligible import Eligibility
from gainassay.tables.parts import PartTable
from gainassay.tables.stages import StageGroup, left_out

PAIRS_AT_A_TIME = 200_000


@dataclass(frozen=True)
class ShortForm:
    """A shortened gain with what it was verified over.

    Attributes
    ----------
    absent : dict[str, str]
        Elements that no stage of the job has, and what is open or short at 0 Hz.
    exact : Expression
        The gain before it was shortened.
    found : Shortened
        The shortened gain, what was dropped, and the verified deviation.
    stage, part : str
        The pair in which the deviation occurs.
    pairs : int
        Pairs over which it was verified, each with the part's nominal figures and with its limits.
    parts_with_gaps : int
        Parts of which a figure is missing; it is taken as ideal.
    """

    topology: Topology
    absent: dict[str, str]
    exact: Expression
    found: Shortened
    stage: str
    part: str
    stages: int
    pairs: int
    parts_with_gaps: int
    within: float


def shorten(prepared: Prepared, topology: Topology, within: float) -> ShortForm:
    """A form shortened as far as its verified deviation, over all eligible pairs, stays within a share of the accuracy.

    Deviations are those of the gain at the nominal elements, with the parts' nominal figures and with their
    limits, against the exact gain from the coefficient functions of the form that formulas are of.

    Raises
    ------
    InputError
        If the job has no stage of that topology, or no part that is eligible for one.
    """
    each = zip(prepared.stages.groups, prepared.eligibility, strict=True)
    group, eligibility = next(((g, e) for g, e in each if g.topology == topology and g.signals is None), (None, None))
    if group is None or eligibility is None:
        if any(g.topology == topology for g in prepared.stages.groups):
            raise InputError(
                f"{prepared.stages.source}: all stages of the topology '{topology.name}' work at a frequency; "
                "a form is shortened for stages at 0 Hz"
            )
        names = [g.topology.name for g in prepared.stages.groups]
        hint = nearest(topology.name, names) or f"; there are stages of {', '.join(names)}"
        raise InputError(f"{prepared.stages.source}: no usable stage has the topology '{topology.name}'{hint}")
    if not eligibility.pairs():
        raise InputError(f"{prepared.parts.source}: no part is eligible for a stage of the topology '{topology.name}'")
    absent = left_out(topology, group.values)
    formulas = formulas_of(topology, absent)
    unknown = int(((prepared.parts.evidence[: len(BASIC)] == MISSING).any(axis=0) & eligibility.serving()).sum())
    found = shorten_formula(formulas.gain.whole, within, _measure(group, prepared.parts, eligibility, formulas))
    stage, part = str(group.names[found.deviation.stage]), str(prepared.parts.names[found.deviation.part])
    if not found.deviation.share <= within:
        raise InputError(
            f"the gain of topology '{topology.name}' has no finite value for stage {stage!r} with part {part!r}, "
            "so nothing can be verified over this job"
        )
    return ShortForm(
        topology=topology,
        absent=absent,
        exact=formulas.gain.whole,
        found=found,
        stage=stage,
        part=part,
        stages=len(group.names),
        pairs=eligibility.pairs(),
        parts_with_gaps=unknown,
        within=within,
    )


def _measure(
    group: StageGroup, parts: PartTable, eligibility: Eligibility, formulas: Formulas
) -> Callable[[Expression], Deviation]:
    """A function that gives the deviation of a formula over all eligible pairs of a job."""
    pattern, eligible = eligibility.patterns()
    none, form = np.full(len(group.names), np.nan), form_of(group.topology)
    stages = stage_side(form, with_tolerances(group.values, np.zeros_like(group.values), group.limits, none))
    # The exact gains are the same for every formula that is tried.
    exact = [
        (departures, stages.gain_ideal[:, None] * (1.0 + nominal_errors(stages, products)))
        for departures in (parts.nominal[AT_DC], parts.worst[AT_DC])
        for products in [part_side(form, departures, departures, parts.evidence[AT_DC])]
    ]
    height = max(1, PAIRS_AT_A_TIME // len(parts.names))

    def deviation(formula: Expression) -> Deviation:
        worst = Deviation(0.0, 0, 0)
        with np.errstate(all="ignore"):
            for top in range(0, len(group.names), height):
                rows = slice(top, top + height)
                elements = {name: row[rows, None] for name, row in zip(form.elements, group.values, strict=True)}
                for departures, gains in exact:
                    found = value(formula, {**elements, **formulas.data_sheet(departures[:, None])})
                    share = np.abs(found / gains[rows] - 1.0) / group.limits[rows, None]
                    share = np.where(np.isnan(share), np.inf, share)
                    share = np.where(eligible[pattern[rows]], share, 0.0)
                    stage, part = (int(i) for i in np.unravel_index(int(share.argmax()), share.shape))
                    if share[stage, part] > worst.share:
                        worst = Deviation(float(share[stage, part]), top + stage, part)
        return worst

    return deviation
