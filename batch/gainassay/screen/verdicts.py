"""From errors to verdicts: one written rule, and the evidence it rests on.

With L the required accuracy and g the guard band (JCGM 106: the acceptance limit lies inside the tolerance limit),

| |error_worst| | evidence | verdict | reason |
|---|---|---|---|
| any, and the stage asks more than the part can bear | any | fail | outside limit.output_swing, ... |
| no finite bound | any | fail | no finite bound |
| above L | any | fail | outside the limit |
| above L (1 - g), up to L | any | fail | inside the limit, but in its guard band |
| up to L (1 - g) | as strong as the basis asks | pass | inside the limit |
| up to L (1 - g) | weaker | unproven | inside the limit, but leans on ... |

The basis is `guaranteed` or `typical`; what is assumed or missing never proves a pass. A number that is missing
is left out of the account, as 0. Its true value could only widen the box, so that `fail` stands, and whatever
is inside the limit is `unproven`. The operating limits are those of `contracts.limits`; one that is not checked proves
nothing either way, and changes no verdict.

Where a least phase margin is asked for, the margin has the last word:

| phase margin | verdict so far | verdict | reason |
|---|---|---|---|
| below the least | any | fail | phase margin below the limit |
| at least that, or the loop gain never reaches 1 | any | as it was | as it was |
| not known, or a second pole that is missing was left out | pass | unproven | what is missing |
| the same | fail, unproven | as it was | as it was |

Margins rest on the part's nominal figures, whatever the basis: data sheets guarantee none of them. A second pole that
is missing could only make the margin smaller.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts.evidence import EVIDENCE
from gainassay.contracts.limits import LIMITS
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.departures import DEPARTURES
from gainassay.forms.form import Form
from gainassay.screen.corners import PartSide, StageSide, term_names
from gainassay.screen.kernel import Outcome
from gainassay.screen.stability import CHECKED, Margins

VERDICTS = ("pass", "fail", "unproven")
PASS, FAIL, UNPROVEN = range(3)

UNBOUNDED_REASON, OUTSIDE, GUARD_BAND, INSIDE, LEANING, OUTSIDE_LIMIT = range(6)
PHASE_MARGIN = "limit.phase_margin"
LIMIT_TERMS = tuple(f"limit.{limit.name}" for limit in LIMITS)
"""What stands for the dominant term where a pair is outside an operating limit."""

_REASONS = (
    "no finite bound",
    "outside the limit",
    "inside the limit, but in its guard band",
    "inside the limit",
    "inside the limit, but leans on",
    *(f"outside {term}" for term in LIMIT_TERMS),
)

BITS = 2
"""Bits that hold the evidence for one departure in a leaning."""


@dataclass(frozen=True)
class Rules:
    """The decision rule of a job.

    Attributes
    ----------
    guard_band : float
        Share of the required accuracy that a pass keeps free.
    basis : int
        Place, in `EVIDENCE`, of the weakest evidence that a pass may rest on.
    phase_margin : float or None
        The least phase margin of a pass [deg]; none: it is not looked at.
    """

    guard_band: float = 0.0
    basis: int = 0
    phase_margin: float | None = None


@dataclass(frozen=True)
class Judgement:
    """What is judged of each pair. All arrays have shape (stages, parts).

    Attributes
    ----------
    verdict : ndarray of uint8
        Place in `VERDICTS`.
    reason : ndarray of int
        Place in `REASONS` of the verdict's reason in words.
    leaning : ndarray of int
        The evidence for each departure that matters to the stage, packed; `LEANINGS` says what it means.
    limit_used : ndarray
        |error_worst| / required accuracy, the guard band not taken off; nan where there is no finite bound.
    """

    verdict: NDArray[np.uint8]
    reason: NDArray[np.int32]
    leaning: NDArray[np.int16]
    limit_used: FloatArray


@dataclass(frozen=True)
class Leaning:
    """What a packed leaning means: the weakest evidence, and which numbers are not guaranteed."""

    evidence: str
    leans_on: str


def _leaning(code: int) -> Leaning:
    codes = [(code >> BITS * index) & ((1 << BITS) - 1) for index in range(len(DEPARTURES))]
    weak = [f"{d.quantity} {EVIDENCE[c]}" for d, c in zip(DEPARTURES, codes, strict=True) if c]
    return Leaning(EVIDENCE[max(codes)], ", ".join(weak))


LEANINGS = tuple(_leaning(code) for code in range(1 << BITS * len(DEPARTURES)))
"""Meaning of every packed leaning."""

DOUBTS = (
    "",
    "the phase margin is not checked: gbw missing",
    "the phase margin leaves out a second pole: f_second_pole_hz missing",
    "the phase margin is not checked: the loop gain stays above 1 up to 100 GHz",
)
"""Why a phase margin proves nothing, by `Margins.doubt`."""

_OF_LEANING = tuple(
    f"{words} {leaning.leans_on}" if place == LEANING else words
    for place, words in enumerate(_REASONS)
    for leaning in LEANINGS
)
UNSTABLE = len(_OF_LEANING)
"""Place of the reason of a phase margin below the limit; those of `DOUBTS` follow, but for the first."""

REASONS = (*_OF_LEANING, "phase margin below the limit", *(f"inside the limit, but {doubt}" for doubt in DOUBTS[1:]))
"""Reason in words, for each kind of reason and, within it, each packed leaning; then those of the phase margin."""

_WEAKEST = np.array([EVIDENCE.index(leaning.evidence) for leaning in LEANINGS])


def judge(
    stages: StageSide,
    parts: PartSide,
    outcome: Outcome,
    rules: Rules,
    outside: NDArray[np.int8] | None = None,
) -> Judgement:
    """Verdict, reason, evidence and share of the limit used, for each pair.

    Parameters
    ----------
    outside : ndarray of int, shape (stages, parts), optional
        Place of the operating limit that a pair is outside of, negative for none.
    """
    weights = 1 << BITS * np.arange(len(DEPARTURES))
    of_part = (parts.evidence.astype(np.int16) * weights[:, None].astype(np.int16)).sum(axis=0, dtype=np.int16)
    seen = (stages.matters * (weights * ((1 << BITS) - 1))[:, None]).sum(axis=0).astype(np.int16)
    leaning = seen[:, None] & of_part
    limits = stages.limits[:, None]
    magnitude = np.abs(outcome.error_worst)
    # nan, where there is no finite bound, compares as outside.
    kind = np.where(
        magnitude <= limits * (1.0 - rules.guard_band),
        np.where(_WEAKEST[leaning] <= rules.basis, INSIDE, LEANING),
        np.where(magnitude <= limits, GUARD_BAND, np.where(np.isnan(magnitude), UNBOUNDED_REASON, OUTSIDE)),
    )
    if outside is not None:
        kind = np.where(outside >= 0, OUTSIDE_LIMIT + outside.astype(kind.dtype), kind)
    verdict = np.array([FAIL, FAIL, FAIL, PASS, UNPROVEN, *[FAIL] * len(LIMITS)], np.uint8)[kind]
    return Judgement(verdict, (kind * len(LEANINGS) + leaning).astype(np.int32), leaning, magnitude / limits)


def dominant_names(form: Form) -> tuple[str, ...]:
    """What a pair's dominant term may be: the terms of its account, the operating limits, the phase margin."""
    return (*term_names(form), *LIMIT_TERMS, PHASE_MARGIN)


def with_phase_margin(judgement: Judgement, margins: Margins, least: float) -> tuple[Judgement, NDArray[np.bool_]]:
    """The verdicts once the phase margin has had its say, and the pairs that it fails.

    Parameters
    ----------
    least : float
        The least phase margin of a pass [deg].
    """
    below = margins.phase_margin_deg < least
    doubtful = ~below & (margins.doubt != CHECKED) & (judgement.verdict == PASS)
    verdict = np.where(below, np.uint8(FAIL), np.where(doubtful, np.uint8(UNPROVEN), judgement.verdict))
    reason = np.where(below, UNSTABLE, np.where(doubtful, UNSTABLE + margins.doubt.astype(np.int32), judgement.reason))
    return replace(judgement, verdict=verdict, reason=reason.astype(np.int32)), below
