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

A stage at a frequency may limit its phase error, too: what is inside L and beyond that limit, less the guard band,
fails.

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
from functools import cache
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from gainassay.contracts.evidence import EVIDENCE
from gainassay.contracts.limits import LIMITS
from gainassay.forms.coefficients import FloatArray
from gainassay.forms.departures import FIGURES
from gainassay.screen.corners import PartSide
from gainassay.screen.kernel import Outcome
from gainassay.screen.stability import CHECKED, Margins

VERDICTS = ("pass", "fail", "unproven")
PASS, FAIL, UNPROVEN = range(3)

UNBOUNDED_REASON, OUTSIDE, GUARD_BAND, INSIDE, LEANING, PHASE, PHASE_GUARD_BAND, OUTSIDE_LIMIT = range(8)
PHASE_ERROR, PHASE_MARGIN = "limit.phase_error", "limit.phase_margin"
LIMIT_TERMS = tuple(f"limit.{limit.name}" for limit in LIMITS)
"""What stands for the dominant term where a pair is outside an operating limit."""

_REASONS = (
    "no finite bound",
    "outside the limit",
    "inside the limit, but in its guard band",
    "inside the limit",
    "inside the limit, but leans on",
    "outside the phase limit",
    "inside the phase limit, but in its guard band",
    *(f"outside {term}" for term in LIMIT_TERMS),
)

BITS = 2
"""Bits that hold the evidence for one figure in a leaning."""


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
        Code of the verdict's reason; `reason` says it in words.
    leaning : ndarray of int
        The evidence for each figure that matters to the stage, packed; `leaning` says what it means.
    limit_used : ndarray
        |error_worst| / required accuracy, the guard band not taken off; nan where there is no finite bound.
    """

    verdict: NDArray[np.uint8]
    reason: NDArray[np.int32]
    leaning: NDArray[np.int32]
    limit_used: FloatArray


@dataclass(frozen=True)
class Leaning:
    """What a packed leaning means: the weakest evidence, and which numbers are not guaranteed."""

    evidence: str
    leans_on: str


@cache
def leaning(code: int) -> Leaning:
    """The meaning of a packed leaning."""
    codes = [(code >> BITS * index) & ((1 << BITS) - 1) for index in range(len(FIGURES))]
    weak = [f"{figure.quantity} {EVIDENCE[c]}" for figure, c in zip(FIGURES, codes, strict=True) if c]
    return Leaning(EVIDENCE[max(codes)], ", ".join(weak))


_LEANINGS = 1 << BITS * len(FIGURES)

DOUBTS = (
    "",
    "the phase margin is not checked: gbw missing",
    "the phase margin leaves out a second pole: f_second_pole_hz missing",
    "the phase margin is not checked: the loop gain stays above 1 up to 100 GHz",
)
"""Why a phase margin proves nothing, by `Margins.doubt`."""

UNSTABLE = len(_REASONS) * _LEANINGS
"""Code of the reason of a phase margin below the limit; those of `DOUBTS` follow, but for the first."""

_OF_MARGINS = ("phase margin below the limit", *(f"inside the limit, but {doubt}" for doubt in DOUBTS[1:]))


def reason(code: int) -> str:
    """The reason in words of a code: a kind of reason and, within it, a packed leaning; or one of the phase margin."""
    if code >= UNSTABLE:
        return _OF_MARGINS[code - UNSTABLE]
    kind, packed = divmod(code, _LEANINGS)
    return f"{_REASONS[kind]} {leaning(packed).leans_on}" if kind == LEANING else _REASONS[kind]


class Judged(Protocol):
    """What verdicts need of stages; limits as fractions, shape (stages,), and whether figures matter to them."""

    @property
    def limits(self) -> FloatArray: ...
    @property
    def matters(self) -> NDArray[np.bool_]: ...


def judge(
    stages: Judged,
    parts: PartSide,
    outcome: Outcome,
    rules: Rules,
    outside: NDArray[np.int8] | None = None,
    phase_limits: FloatArray | None = None,
) -> Judgement:
    """Verdict, reason, evidence and share of the limit used, for each pair.

    Parameters
    ----------
    outside : ndarray of int, shape (stages, parts), optional
        Place of the operating limit that a pair is outside of, negative for none.
    phase_limits : ndarray, shape (stages,), optional
        Largest phase error [degree], where the outcome has one.
    """
    weights = (1 << BITS * np.arange(len(parts.evidence), dtype=np.int32))[:, None]
    of_part = (parts.evidence * weights).sum(axis=0, dtype=np.int32)
    seen = (stages.matters * (weights * ((1 << BITS) - 1))).sum(axis=0, dtype=np.int32)
    packed = seen[:, None] & of_part
    limits = stages.limits[:, None]
    magnitude = np.abs(outcome.error_worst)
    # nan, where there is no finite bound, compares as outside.
    kind = np.where(
        magnitude <= limits * (1.0 - rules.guard_band),
        np.where(packed & _weaker_than(rules.basis), LEANING, INSIDE),
        np.where(magnitude <= limits, GUARD_BAND, np.where(np.isnan(magnitude), UNBOUNDED_REASON, OUTSIDE)),
    )
    if outcome.phase is not None and phase_limits is not None:
        share = np.abs(outcome.phase) / phase_limits[:, None]
        turned = ((kind == INSIDE) | (kind == LEANING)) & (share > 1.0 - rules.guard_band)
        kind = np.where(turned, np.where(share > 1.0, PHASE, PHASE_GUARD_BAND), kind)
    if outside is not None:
        kind = np.where(outside >= 0, OUTSIDE_LIMIT + outside.astype(kind.dtype), kind)
    verdict = np.array([PASS if k == INSIDE else UNPROVEN if k == LEANING else FAIL for k in range(len(_REASONS))])
    code = (kind * _LEANINGS + packed).astype(np.int32)
    return Judgement(verdict.astype(np.uint8)[kind], code, packed, magnitude / limits)


def _weaker_than(basis: int) -> int:
    """Bits of a leaning of which one is set where some evidence is weaker; a basis is one of the first two."""
    return sum((((1 << BITS) - 1) & ~basis) << BITS * index for index in range(len(FIGURES)))


def is_phase(judgement: Judgement) -> NDArray[np.bool_]:
    """Whether the phase error decides."""
    kind = judgement.reason // _LEANINGS
    return np.asarray((kind == PHASE) | (kind == PHASE_GUARD_BAND))


DECIDING = (*LIMIT_TERMS, PHASE_ERROR, PHASE_MARGIN)
"""What may stand for a pair's dominant term, behind the terms of its account."""


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
