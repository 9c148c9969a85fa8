"""`gainassay form`."""

from __future__ import annotations

import shutil
import sys
from collections.abc import Mapping
from pathlib import Path

import click

from gainassay import service, shortened
from gainassay.cli import shared
from gainassay.contracts.documents import nearest
from gainassay.errors import InputError
from gainassay.forms import library
from gainassay.forms.cache import formulas_of
from gainassay.forms.topology import Topology
from gainassay.report import formulas as report
from gainassay.report import shortened as short_report
from gainassay.report.values import filled_in


@click.command()
@click.argument("name", metavar="TOPOLOGY")
@click.argument("more", metavar="[NAME=VALUE]...", nargs=-1)
@click.option(
    "--as", "kind", type=click.Choice(["text", "latex", "mathml", "json"]), default="text", help="How to show it."
)
@click.option(
    "--at",
    "values",
    multiple=True,
    metavar="NAME=VALUE",
    help="Put numbers in, as r1=1k r2=100k A=1e5, and show each ratio's value.",
)
@click.option(
    "--for", "job", type=click.Path(path_type=Path), metavar="JOB", help="Shorten it to what matters for a job."
)
@click.option(
    "--within",
    type=click.FloatRange(min=0, min_open=True, max=1),
    default=0.1,
    show_default=True,
    help="With --for: the share of the required accuracy that the short formula may deviate by.",
)
def form(name: str, more: tuple[str, ...], kind: str, values: tuple[str, ...], job: Path | None, within: float) -> None:
    """Show the gain of TOPOLOGY, a built-in name or a topology file, as ideal gain times correction factor.

    Beside the gain stand input impedance, output impedance and return ratio. Every formula is proved.
    """
    if more and not values:
        raise click.UsageError(f"{more[0]!r} is one argument too many; numbers to put in follow --at")
    if job is not None:
        prepared = service.prepare(job)
        topology = _chosen(name, prepared.topologies)
        found = shortened.shorten(prepared, topology, within)
        if kind == "json":
            shared.data(short_report.data(found))
        elif kind == "text":
            shared.lines(short_report.text(found, _has_unicode(), _width()))
        else:
            raise click.UsageError("--for prints text or JSON")
        return
    topology = _chosen(name, library.library())
    formulas = formulas_of(topology)
    if values:
        absent, numbers = filled_in(topology, formulas, (*values, *more))
        shared.lines(report.numbers(topology, formulas_of(topology, absent), numbers))
    elif kind == "json":
        shared.data(report.data(topology, formulas))
    elif kind == "latex":
        shared.lines(report.latex(topology, formulas))
    elif kind == "mathml":
        shared.lines(report.mathml(topology, formulas))
    else:
        shared.lines(report.text(topology, formulas, _has_unicode(), _width()))


def _chosen(name: str, known: Mapping[str, Topology]) -> Topology:
    if name in known:
        return known[name]
    if name.endswith(".toml"):
        return library.read(Path(name))
    hint = nearest(name, known) or "; `gainassay topologies` lists what there is"
    raise InputError(f"there is no topology {name!r}{hint}")


def _has_unicode() -> bool:
    """Whether the terminal shows the signs for parallel and product; what goes to a file stays plain."""
    return sys.stdout.isatty() and (sys.stdout.encoding or "").lower().startswith("utf")


def _width() -> int:
    return max(60, shutil.get_terminal_size((100, 24)).columns) if sys.stdout.isatty() else 100
