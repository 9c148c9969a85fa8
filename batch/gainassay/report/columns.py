"""What the columns of tables and the keys of a job mean: for a terminal, as a page, for a program."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import asdict
from typing import Any

from gainassay.contracts import documents, tables
from gainassay.contracts.documents import nearest
from gainassay.contracts.tables import Column
from gainassay.errors import InputError
from gainassay.report.text import table


def chosen(names: Sequence[str]) -> dict[str, list[Column]]:
    """The columns of those names, by table; all that users write if there are no names.

    Raises
    ------
    InputError
        If a name is in no table.
    """
    everywhere = {name: list(tables.columns(name)) for name in tables.all_tables()}
    if not names:
        return {name: everywhere[name] for name in tables.WRITTEN_BY_USERS}
    known = {column.name for columns in everywhere.values() for column in columns}
    for name in names:
        if name not in known:
            raise InputError(f"there is no column '{name}'{nearest(name, known)}")
    found = {table: [c for c in columns if c.name in names] for table, columns in everywhere.items()}
    return {table: columns for table, columns in found.items() if columns}


def listing(found: dict[str, list[Column]]) -> list[str]:
    """Columns with unit, limits and meaning, a paragraph for each table."""
    lines = []
    for name, columns in found.items():
        rows = [[f"  {c.name}", c.unit, c.limits(), c.meaning] for c in columns]
        lines += ["", tables.title(name), *table(["  column", "unit", "limits", "meaning"], rows)]
    return lines[1:]


def page() -> Iterator[str]:
    """All tables and the job's keys as a page of Markdown."""
    yield "# Columns and keys"
    yield ""
    yield "Made by `gainassay columns --page` from the files beside it."
    for name in tables.all_tables():
        rows = ([f"`{c.name}`", c.unit, c.limits(), c.meaning] for c in tables.columns(name))
        yield from _section(tables.title(name), tables.description(name), ["column", "unit", "limits", "meaning"], rows)
    keys = ([f"`{key.path}`", key.meaning, f"`{key.default}`" if key.default else ""] for key in documents.keys("job"))
    yield from _section("Job file", documents.schema("job")["description"], ["key", "meaning", "if not given"], keys)


def _section(title: str, description: str, header: list[str], rows: Iterable[list[str]]) -> Iterator[str]:
    yield from ("", f"## {title}", "", description.replace("<", "\\<"), "", _row(header), _row(["---"] * len(header)))
    yield from map(_row, rows)


def _row(cells: Iterable[str]) -> str:
    return f"| {' | '.join(cell if cell.startswith('`') else _escaped(cell) for cell in cells)} |"


def _escaped(text: str) -> str:
    return text.replace("|", "\\|").replace("<", "\\<")


def data(found: dict[str, list[Column]]) -> dict[str, Any]:
    """Columns with all that is said of them, by table."""
    return {name: [asdict(column) for column in columns] for name, columns in found.items()}
