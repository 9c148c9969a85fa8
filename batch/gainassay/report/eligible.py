"""How many pairs are eligible and how many each rule excludes, for a person."""

from __future__ import annotations

from collections.abc import Mapping

from gainassay.report.text import table


def text(pairs: int, not_eligible: Mapping[str, int], never_eligible: Mapping[str, int]) -> list[str]:
    """The eligible pairs, the others by rule, and who is left without a partner; nothing where there is no rule."""
    if not not_eligible:
        return []
    return [
        "",
        f"Pairs that are eligible: {pairs:,}",
        f"Pairs that are not, by the first rule that excludes them: {sum(not_eligible.values()):,}",
        *table(["", ""], [[f"  {name}", f"{count:,}"] for name, count in not_eligible.items()], right=[1])[1:],
        f"Stages without an eligible part: {never_eligible['stages']:,}",
        f"Parts without an eligible stage: {never_eligible['parts']:,}",
    ]
