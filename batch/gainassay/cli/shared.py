"""What several commands share: arguments, options, and how results and remarks are printed."""

from __future__ import annotations

import json
import math
import re
import sys
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, TypeVar

import click

from gainassay.errors import ConditionMet, InputError

Command = TypeVar("Command", bound=Callable[..., Any])

job_argument = click.argument("job", type=click.Path(path_type=Path), metavar="JOB")
json_option = click.option("--json", "as_json", is_flag=True, help="Print JSON, for a program to read.")


def fail_on_option(*conditions: str) -> Callable[[Command], Command]:
    """`--fail-on`, which may be given more than once."""
    return click.option(
        "--fail-on",
        multiple=True,
        type=click.Choice(conditions),
        help="Exit with status 3 if there is any such row. May be given more than once.",
    )


def complete_columns(_: click.Context, __: click.Parameter, start: str) -> list[str]:
    """Names of columns, for a shell to complete."""
    from gainassay.contracts import tables

    names = dict.fromkeys(column.name for table in tables.all_tables() for column in tables.columns(table))
    return [name for name in names if name.startswith(start)]


def complete_topologies(_: click.Context, __: click.Parameter, start: str) -> list[str]:
    """Names of built-in topologies, for a shell to complete."""
    from gainassay import resources

    return sorted(path.stem for path in resources.topologies().glob("*.toml") if path.stem.startswith(start))


CONTROL = re.compile(r"[\x00-\x09\x0b-\x1f\x7f-\x9f]")
"""Characters that a terminal obeys; line feeds apart."""


def printable(text: str) -> str:
    """Text whose control characters a terminal shows and does not obey."""
    return CONTROL.sub(lambda found: f"\\u{ord(found[0]):04x}", text)


def lines(text: Iterable[str]) -> None:
    """Results, on standard output."""
    _write("\n".join(text))


def data(value: Any) -> None:
    """Results as JSON, on standard output; what is not a finite number is null."""
    _write(json.dumps(_finite(value), indent=1, ensure_ascii=False, default=str))


def _write(text: str) -> None:
    try:
        click.echo(printable(text))
    except BrokenPipeError:
        raise
    except OSError as error:
        raise InputError(f"standard output cannot be written: {error.strerror or error}") from None


def warn(warnings: Iterable[str]) -> None:
    """Warnings, on standard error."""
    for warning in warnings:
        click.echo(printable(f"warning: {warning}"), err=True)


@contextmanager
def progress(label: str, pairs: int) -> Iterator[Callable[[int], None] | None]:
    """A bar on standard error while a person watches; silence otherwise."""
    if not sys.stderr.isatty():
        yield None
        return
    with click.progressbar(length=pairs, label=label, file=sys.stderr, show_pos=True) as bar:
        yield bar.update


def meet(conditions: Iterable[str], counts: dict[str, int]) -> None:
    """Raise if a condition asked for came true.

    Raises
    ------
    ConditionMet
        If a count of one of the conditions is not zero.
    """
    met = [f"{counts[name]:,} {name}" for name in conditions if counts[name]]
    if met:
        raise ConditionMet(f"as asked with --fail-on: {', '.join(met)}")


def _finite(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_finite(item) for item in value]
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value
