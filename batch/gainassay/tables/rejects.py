"""Cells that could not be used, collected while a table is read."""

from __future__ import annotations

from dataclasses import dataclass, field


@dataclass(frozen=True, order=True)
class Reject:
    """A cell that could not be used. Its row is left out; nothing is repaired."""

    source: str
    row: int
    column: str
    value: str
    reason: str


@dataclass
class Rejects:
    """The rejects of one table, while it is read.

    Attributes
    ----------
    positions : set[int]
        Positions, in the table as read, of the rows to leave out.
    found : list[Reject]
        Every reject.
    """

    source: str
    positions: set[int] = field(default_factory=set)
    found: list[Reject] = field(default_factory=list)

    def add(self, position: int, row: int, column: str, value: str, reason: str) -> None:
        """Refuse the row at `position`, the file's row `row`, for one of its cells."""
        self.positions.add(position)
        self.found.append(Reject(self.source, row, column, value, reason))


def rejected_rows(rejects: tuple[Reject, ...]) -> int:
    """How many rows of one table the rejects leave out."""
    return len({reject.row for reject in rejects})
