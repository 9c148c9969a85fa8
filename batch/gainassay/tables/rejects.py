"""Cells that could not be used, collected while a table is read."""

from __future__ import annotations

import re
from collections import Counter
from dataclasses import dataclass
from operator import attrgetter


@dataclass(frozen=True)
class Reject:
    """A cell that could not be used. Its row is left out; nothing is repaired.

    Attributes
    ----------
    column : str
        What the user calls it; several where the reason lies between them; empty: the whole row.
    name : str
        The name in that row; empty if it has none.
    """

    source: str
    row: int
    column: str
    value: str
    reason: str
    name: str = ""

    def kind(self) -> str:
        """The reason without what is particular to the cell."""
        return re.split("[;:]", self.reason, maxsplit=1)[0]


PLACE = attrgetter("source", "row", "column", "value", "reason")
"""What rejects are ordered by."""


def rejected_rows(rejects: tuple[Reject, ...]) -> int:
    """How many rows of one table the rejects leave out."""
    return len({(reject.source, reject.row) for reject in rejects})


def by_reason(rejects: tuple[Reject, ...]) -> dict[str, int]:
    """How many cells were rejected for each kind of reason, the most frequent first."""
    return dict(Counter(reject.kind() for reject in rejects).most_common())
