"""A proposed section of a job as TOML, for a person to review."""

from __future__ import annotations

import json
from collections.abc import Iterator

from gainassay.tables.proposal import Guess, Proposal

OPTIONS = ("delimiter", "encoding", "sheet", "header_row", "table", "query")


def text(proposal: Proposal) -> Iterator[str]:
    """The section. What is doubtful stands in comments, so that nothing of it is used unseen."""
    source = proposal.source
    yield f"# A proposal for [{source.section}], guessed from headers and values; nothing was applied. Check each line."
    yield f"[{source.section}]"
    yield f"from = {quoted(source.at)}"
    for option in OPTIONS:
        if said := getattr(source, option):
            yield f"{option} = {said if isinstance(said, int) else quoted(said)}"
    if source.decimal != ".":
        yield f"decimal = {quoted(source.decimal)}"
    yield ""
    yield f"[{source.section}.columns]"
    if proposal.found:
        yield f"# under their own names already: {', '.join(proposal.found)}"
    for guess in proposal.guesses:
        yield from _lines(guess)
    if proposal.missing:
        yield f"# missing, and needed in each row: {', '.join(proposal.missing)}"


def _lines(guess: Guess) -> Iterator[str]:
    if not guess.ours:
        yield f"# {quoted(guess.theirs)} is like no column"
        return
    meant = quoted(guess.ours)
    if guess.unit:
        meant = f"{{ is = {meant}, unit = {quoted(guess.unit)} }}"
    line = f"{quoted(guess.theirs)} = {meant}"
    if guess.doubts:
        yield f"# in doubt: {'; '.join(guess.doubts)}"
        yield f"# {line}  # {guess.reads}"
    else:
        yield f"{line}  # {guess.reads}"


def quoted(text: str) -> str:
    """Text as a TOML string; TOML takes JSON's escapes, and wants DEL escaped, too."""
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")
