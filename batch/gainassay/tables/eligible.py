"""Which parts may serve which stages, by the job's `[[eligible]]` rules.

A rule comes down to comparisons of one column of the part table with one of the stage table. Where the stage's cell
is blank the stage asks for nothing, and every part will do; where only the part's is, what it offers is not known, and
it will not do.
"""

from __future__ import annotations

import math
from collections.abc import Hashable, Iterable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gainassay.job import Comparison, Eligible
from gainassay.tables.compared import Cells
from gainassay.tables.parts import PartTable
from gainassay.tables.raw import shown
from gainassay.tables.stages import StageGroup

ELIGIBLE = -1
"""Stands for the rule that excludes a pair where none does."""


@dataclass(frozen=True)
class Relation:
    """How a part's cell is held against a stage's, and what messages call that."""

    holds: np.ufunc
    words: str


RELATIONS = {
    "at_least": Relation(np.greater_equal, "at least"),
    "at_most": Relation(np.less_equal, "at most"),
    "equals": Relation(np.equal, "the same as"),
}


@dataclass(frozen=True)
class Eligibility:
    """Which parts may serve the stages of one topology.

    Attributes
    ----------
    rules : tuple[Eligible, ...]
        In the order of the job.
    stages, parts : Mapping[str, Cells]
        The columns that they compare.
    asking : ndarray of int, shape (stages,)
        Stages that ask for the same are related to the parts once: the place of what each asks for.
    excluded_by : ndarray of int8, shape (askings, parts)
        Place of the first rule that excludes the part; `ELIGIBLE` if none does.
    """

    rules: tuple[Eligible, ...]
    stages: Mapping[str, Cells]
    parts: Mapping[str, Cells]
    asking: NDArray[np.intp]
    excluded_by: NDArray[np.int8]

    def patterns(self) -> tuple[NDArray[np.intp], NDArray[np.bool_]]:
        """The sets of parts that some stage may have, each once, and which of them is each stage's.

        Returns
        -------
        ndarray of int, shape (stages,)
            Place of each stage's pattern.
        ndarray of bool, shape (patterns, parts)
            The eligible parts of each.
        """
        eligible = self.excluded_by == ELIGIBLE
        place_of, firsts = _places(row.tobytes() for row in np.packbits(eligible, axis=1))
        return place_of[self.asking], eligible[firsts]

    def pairs(self) -> int:
        """Eligible pairs."""
        return int((self.excluded_by == ELIGIBLE).sum(axis=1)[self.asking].sum())

    def not_eligible(self) -> NDArray[np.int64]:
        """Pairs that each rule is the first to exclude, shape (rules,)."""
        stages = np.bincount(self.asking, minlength=len(self.excluded_by))
        excluded = [(self.excluded_by == place).sum(axis=1) for place in range(len(self.rules))]
        return np.array([stages @ parts for parts in excluded], np.int64)

    def served(self) -> NDArray[np.bool_]:
        """Whether a stage has any eligible part, shape (stages,)."""
        return np.asarray((self.excluded_by == ELIGIBLE).any(axis=1)[self.asking])

    def serving(self) -> NDArray[np.bool_]:
        """Whether a part is eligible for any of the stages, shape (parts,)."""
        return np.asarray((self.excluded_by == ELIGIBLE).any(axis=0))

    def objection(self, stage: int, part: int) -> str:
        """Why a pair is not eligible: the first rule that excludes it, with both values; nothing if it is."""
        place = self.excluded_by[self.asking[stage], part]
        if place == ELIGIBLE:
            return ""
        rule = self.rules[place]
        wanted, offered = _only(self.stages, stage), _only(self.parts, part)
        return f"the rule '{rule.name}' excludes it: " + ", and ".join(
            f"the part's {comparison.part} is {_shown(offered[comparison.part])}; wanted is "
            f"{RELATIONS[comparison.relation].words} the stage's {comparison.stage}, {_shown(wanted[comparison.stage])}"
            for comparison in rule.comparisons()
            if not _met(comparison, wanted, offered).all()
        )


def relate(rules: Sequence[Eligible], stages: StageGroup, parts: PartTable) -> Eligibility:
    """Hold every part against what the stages of one topology ask for."""
    asked = [stages.compared[name].text for name in stages.compared]
    asking, firsts = _places(tuple(words) for _, *words in zip(stages.names, *asked, strict=True))
    each = {name: cells.at(firsts) for name, cells in stages.compared.items()}
    excluded_by = np.full((len(firsts), len(parts.names)), ELIGIBLE, np.int8)
    for place in reversed(range(len(rules))):
        for comparison in rules[place].comparisons():
            excluded_by[~_met(comparison, each, parts.compared)] = place
    return Eligibility(tuple(rules), stages.compared, parts.compared, asking, excluded_by)


def _met(comparison: Comparison, stages: Mapping[str, Cells], parts: Mapping[str, Cells]) -> NDArray[np.bool_]:
    """Where a comparison lets a part serve a stage, shape (stages, parts)."""
    stage, part = stages[comparison.stage], parts[comparison.part]
    wanted, offered = _codes(stage, part) if comparison.relation == "equals" else (stage.values, part.values)
    # What is no number is nan, and compares as false.
    met = RELATIONS[comparison.relation].holds(offered, wanted[:, None])
    return np.asarray(met | stage.blank()[:, None])


def _codes(*columns: Cells) -> list[NDArray[np.intp]]:
    """Cells as codes, the same for equal numbers and for equal texts."""
    codes: dict[float | str, int] = {}
    return [
        np.array(
            [
                codes.setdefault(text if math.isnan(value) else value, len(codes))
                for text, value in zip(cells.text, cells.values.tolist(), strict=True)
            ]
        )
        for cells in columns
    ]


def _places(keys: Iterable[Hashable]) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Place of each key among the different ones, and where each of these stands first."""
    found: dict[Hashable, int] = {}
    places = np.array([found.setdefault(key, len(found)) for key in keys], np.intp)
    return places, np.unique(places, return_index=True)[1]


def _only(columns: Mapping[str, Cells], row: int) -> dict[str, Cells]:
    return {name: cells.at(np.array([row])) for name, cells in columns.items()}


def _shown(cells: Cells) -> str:
    return shown(repr(cells.text[0])) if cells.text[0] else "blank"
