"""From errors to verdicts: one written rule, and the evidence it rests on.

| |error_worst| against the limit | evidence | verdict |
|---|---|---|
| no finite bound | any | fail |
| above | any | fail |
| at or below | guaranteed | pass |
| at or below | typical, assumed or missing | unproven |

A number that is missing is left out of the account, as 0. Its true value could only widen the box, so that
`fail` stands, and whatever is inside the limit is `unproven`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts.evidence import EVIDENCE
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.departures import DEPARTURES
from gainassay.screen.corners import PartSide, StageSide
from gainassay.screen.kernel import Outcome

VERDICTS = ("pass", "fail", "unproven")
PASS, FAIL, UNPROVEN = range(3)

BITS = 2
"""Bits that hold the evidence for one departure in a leaning."""


@dataclass(frozen=True)
class Judgement:
    """What is judged of each pair. All arrays have shape (stages, parts).

    Attributes
    ----------
    verdict : ndarray of uint8
        Place in `VERDICTS`.
    leaning : ndarray of int
        The evidence for each departure that matters to the stage, packed; `LEANINGS` says what it means.
    limit_used : ndarray
        |error_worst| / limit; nan where there is no finite bound.
    """

    verdict: NDArray[np.uint8]
    leaning: NDArray[np.int16]
    limit_used: FloatArray


@dataclass(frozen=True)
class Leaning:
    """What a packed leaning means: the weakest evidence, and which numbers are not guaranteed."""

    evidence: str
    leans_on: str


def _leaning(code: int) -> Leaning:
    codes = [code >> BITS * index & (1 << BITS) - 1 for index in range(len(DEPARTURES))]
    weak = [f"{d.quantity} {EVIDENCE[c]}" for d, c in zip(DEPARTURES, codes, strict=True) if c]
    return Leaning(EVIDENCE[max(codes)], ", ".join(weak))


LEANINGS = tuple(_leaning(code) for code in range(1 << BITS * len(DEPARTURES)))
"""Meaning of every packed leaning."""

_IS_GUARANTEED = np.array([leaning.evidence == EVIDENCE[0] for leaning in LEANINGS])


def judge(stages: StageSide, parts: PartSide, outcome: Outcome) -> Judgement:
    """Verdict, evidence and share of the limit used, for each pair."""
    weights = 1 << BITS * np.arange(len(DEPARTURES))
    of_part = (parts.evidence.astype(np.int16) * weights[:, None].astype(np.int16)).sum(axis=0, dtype=np.int16)
    seen = (stages.matters * (weights * ((1 << BITS) - 1))[:, None]).sum(axis=0).astype(np.int16)
    leaning = seen[:, None] & of_part
    limits = stages.limits[:, None]
    magnitude = np.abs(outcome.error_worst)
    # nan, where there is no finite bound, compares as outside.
    inside = magnitude <= limits
    verdict = np.where(inside, np.where(_IS_GUARANTEED[leaning], PASS, UNPROVEN), FAIL).astype(np.uint8)
    return Judgement(verdict, leaning, magnitude / limits)
