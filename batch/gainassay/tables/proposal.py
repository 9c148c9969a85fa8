"""What the columns of somebody's table may be, guessed from headers and values for a person to review."""

from __future__ import annotations

import codecs
import re
import tomllib
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from gainassay.contracts.quantities import Writing, numbers
from gainassay.contracts.tables import Column
from gainassay.contracts.units import NOTATIONS, notation, power_of_ten
from gainassay.job import Source, is_address
from gainassay.tables import sources
from gainassay.tables.raw import RawTable, is_number

DELIMITERS = (",", ";", "\t", "|")
LOOKED_AT = 1 << 16
"""Bytes of a text file that its delimiter is guessed from."""

IN_BRACKETS = re.compile(r"[(\[{]\s*([^)\]}]*?)\s*[)\]}]")
TRAILING = {"ohm": "ohm", "db": "dB", "pct": "%", "ppm": "ppm", "hz": "Hz", "khz": "kHz", "kohm": "kohm"}
"""Units at the end of a header in whatever case; what could be milli or mega is not among them."""


@dataclass(frozen=True)
class Guess:
    """What a column may be.

    Attributes
    ----------
    theirs : str
        Its header.
    ours : str
        The column that it may be; empty: none is like it.
    unit : str
        The unit of its numbers, where it is another than ours.
    reads : str
        What its cells give then.
    doubts : tuple[str, ...]
        What a person must decide before it can be used.
    """

    theirs: str
    ours: str
    unit: str = ""
    reads: str = ""
    doubts: tuple[str, ...] = ()


@dataclass(frozen=True)
class Proposal:
    """A section of a job for a table, for review.

    Attributes
    ----------
    source : Source
        The table with what was found out about how it is written.
    found : tuple[str, ...]
        Columns that bear our names.
    guesses : tuple[Guess, ...]
        The others, in their order.
    missing : tuple[str, ...]
        Columns that each row must fill and that nothing may be.
    """

    source: Source
    found: tuple[str, ...]
    guesses: tuple[Guess, ...]
    missing: tuple[str, ...]


def propose(source: Source, known: Mapping[str, Column]) -> Proposal:
    """A section of a job for a table.

    Parameters
    ----------
    source : Source
        Where the table lies, and what is known of how it is written.
    known : Mapping[str, Column]
        The columns that such a table may have, by name.

    Raises
    ------
    InputError
        If the table cannot be read.
    """
    source = _with_dialect(source)
    table = sources.read(source, {})
    source = replace(source, decimal=_decimal(table) if source.decimal == "." else source.decimal)
    found = tuple(name for name in table.columns if name in known)
    others = [name for name in table.columns if name not in known]
    guesses = [_guess(name, table, source, known) for name in others]
    taken = Counter([*found, *(guess.ours for guess in guesses)])
    guesses = [
        replace(guess, doubts=(*guess.doubts, "several columns may be this one"))
        if guess.ours and taken[guess.ours] > 1
        else guess
        for guess in guesses
    ]
    missing = tuple(c.name for c in known.values() if c.required and c.name not in taken)
    return Proposal(source, found, tuple(_one_of_each_figure(guesses, found, known)), missing)


def _one_of_each_figure(guesses: Sequence[Guess], found: Sequence[str], known: Mapping[str, Column]) -> Iterator[Guess]:
    """The guesses, those in doubt whose figure another column gives already, though in another unit."""
    givers = {known[name].in_place_of or name: name for name in found}
    for guess in guesses:
        if not guess.ours or guess.doubts:
            yield guess
            continue
        giver = givers.setdefault(known[guess.ours].in_place_of or guess.ours, guess.theirs)
        doubt = f"'{giver}' gives the same figure, and a row may give only one of the two"
        yield guess if giver == guess.theirs else replace(guess, doubts=(doubt,))


def _with_dialect(source: Source) -> Source:
    """A source with delimiter and encoding of its text, where they are not said and not the usual ones."""
    path = Path(source.at)
    kind = sources.KINDS.get(path.suffix.lower(), "csv")
    if is_address(source.at) or source.table or source.query or kind != "csv":
        return source
    start = _start(path)
    encoding = source.encoding or _encoding(start)
    text = start.decode(encoding or "utf-8", errors="replace")
    delimiter = source.delimiter or _delimiter(text.splitlines()[:-1] or [text])
    return replace(source, encoding=encoding, delimiter="" if delimiter == "," else delimiter)


def _start(path: Path) -> bytes:
    """How a file begins; nothing of what is none or cannot be read, for then its reader says so."""
    try:
        if not path.is_file():
            return b""
        with path.open("rb") as file:
            return file.read(LOOKED_AT)
    except (OSError, ValueError):
        return b""


def _encoding(start: bytes) -> str:
    if start.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
        return "utf-16"
    try:
        codecs.getincrementaldecoder("utf-8")().decode(start)
    except UnicodeDecodeError:
        return "cp1252"
    return ""


def _delimiter(lines: Sequence[str]) -> str:
    """The mark that stands equally often in most lines."""
    counts = {mark: Counter(line.count(mark) for line in lines if line.strip()) for mark in DELIMITERS}
    steady = {mark: max(((many, n) for n, many in c.items() if n), default=(0, 0)) for mark, c in counts.items()}
    return max(DELIMITERS, key=lambda mark: steady[mark])


def _decimal(table: RawTable) -> str:
    """A comma where numbers in text have commas and none has a point."""
    texts = [cells for cells in table.columns.values() if pa.types.is_string(cells.type)]
    commas, points = (any(_count(cells, mark) for cells in texts) for mark in (",", r"\."))
    return "," if commas and not points else "."


def _count(cells: pa.Array, mark: str) -> int:
    """Numbers with a mark between their digits."""
    return int(pc.sum(pc.match_substring_regex(cells, rf"^\s*[+-]?[0-9]+{mark}[0-9]+\b")).as_py() or 0)


def _guess(theirs: str, table: RawTable, source: Source, known: Mapping[str, Column]) -> Guess:
    """What one column may be."""
    unit, plain = _parted(theirs)
    quantity = _quantity(plain, source.section, known)
    if not quantity:
        return Guess(theirs, "")
    limits = {} if quantity in known else _words()["limits"]
    limit = next((name for name, words in limits.items() if _fits(plain, words)), "")
    columns = [c for c in known.values() if quantity in (c.name, c.in_place_of) or _is_limit_of(quantity, c.name)]
    named = [column for column in columns if column.name.endswith(f"_{limit}")] if limit else columns
    named = [column for column in named if not unit or power_of_ten(unit, column.unit) is not None] or named or columns
    column = next((c for c in named if c.name.endswith("_typ")), named[0])
    doubts = []
    if quantity not in known and len(columns) > 1 and not limit:
        doubts.append("its header says neither min nor typ nor max")
    if limit and not column.name.endswith(f"_{limit}"):
        doubts.append(f"there is no column for its {limit}")
    if unit and power_of_ten(unit, column.unit) is None:
        doubts.append(f"'{unit}' is no unit of {column.name}, which is in {column.unit or 'no unit'}")
        unit = ""
    unit = "" if power_of_ten(unit, column.unit) == 0 else unit
    reads, more = _values(table.columns[theirs], column, Writing(unit, source.decimal), source.section)
    return Guess(theirs, column.name, unit, reads, (*doubts, *more))


def _parted(header: str) -> tuple[str, str]:
    """The unit in a header's brackets as we spell it, and its words: lower case, one space between them."""
    inside = IN_BRACKETS.findall(header)
    known = [_respelled(text) for text in inside]
    unit = next((text for text in reversed(known) if _is_unit(text)), "")
    others = [text for text, own in zip(inside, known, strict=True) if own != unit]
    kept = " ".join([IN_BRACKETS.sub(" ", header), *others])
    words = " ".join(re.findall(r"[a-z]+|[0-9]+", kept.casefold()))
    last = words.rpartition(" ")[2]
    return unit or TRAILING.get(last, ""), words


def _respelled(unit: str) -> str:
    return re.sub("(?i)ohms?$|[\u03a9\u2126]$", "ohm", unit.strip())


def _is_unit(text: str) -> bool:
    return any(power_of_ten(text, own) is not None for own in NOTATIONS)


def _is_limit_of(quantity: str, name: str) -> bool:
    """Whether a column gives a limit or a typical figure of a quantity, in its unit or in dB."""
    return bool(re.fullmatch(rf"{re.escape(quantity)}(_db)?_(min|typ|max)", name))


def _quantity(words: str, section: str, known: Mapping[str, Column]) -> str:
    """The quantity, or the column, whose words fit best."""
    squeezed = words.replace(" ", "")
    own = next((name for name in known if name.replace("_", "") == squeezed), "")
    if own:
        return own
    fitting = [
        (max((len(word) for word in found["words"] if _fits(words, [word])), default=0), name)
        for name, found in _words()[section].items()
    ]
    length, name = max(fitting, default=(0, ""))
    # What fits best may be a quantity that no column is for: its header is none of a lesser fit either.
    is_read = name in known or any(_is_limit_of(name, column) for column in known)
    return name if length and is_read else ""


def _fits(words: str, wanted: Sequence[str]) -> bool:
    return any(f" {word} " in f" {words} " for word in wanted)


@cache
def _words() -> dict[str, Any]:
    return tomllib.loads(Path(__file__).with_name("words.toml").read_text(encoding="utf-8"))


def _values(cells: pa.Array, column: Column, writing: Writing, section: str) -> tuple[str, tuple[str, ...]]:
    """What a column's cells give, and what is doubtful about them."""
    if not column.is_number:
        return f"{pc.count_distinct(cells).as_py():,} different", ()
    if not pa.types.is_string(cells.type) and not is_number(cells):
        return "", ("its cells are neither text nor numbers",)
    found = numbers(cells, column, writing)
    read = found.values[np.isfinite(found.values)]
    given = int((~found.blank).sum())
    if not len(read):
        reason = next(iter(found.refused.values()), "")
        return f"none of {given:,} cells is read", (f"a cell {reason}" if reason else "it is blank",)
    middle = float(np.median(read))
    unit = column.unit if notation(column.unit).symbols else ""
    reads = f"{len(read):,} of {given:,} cells, {read.min():g} to {read.max():g} {unit}".rstrip()
    return reads, tuple(_doubts_of_values(middle, found.refused, given, _plausible(column, section), unit))


def _doubts_of_values(
    middle: float, refused: Mapping[int, str], given: int, plausible: tuple[float, float], unit: str
) -> Iterator[str]:
    if not plausible[0] <= abs(middle) <= plausible[1]:
        yield f"their middle, {middle:g} {unit}, is unusual; is the unit another?"
    if len(refused) * 2 > given:
        yield f"most cells are refused: {next(iter(refused.values()))}"


def _plausible(column: Column, section: str) -> tuple[float, float]:
    """Between what the middle of a column's values lies."""
    quantity = re.sub("_(min|typ|max)$", "", column.name)
    lowest, highest = _words()[section].get(quantity, {}).get("plausible", (-np.inf, np.inf))
    return lowest, highest
