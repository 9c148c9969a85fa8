"""`gainassay form`."""

from __future__ import annotations

import shutil
import sys
from collections.abc import Mapping
from pathlib import Path

import click

from gainassay.cli import shared
from gainassay.contracts.documents import nearest
from gainassay.errors import InputError
from gainassay.forms import library
from gainassay.forms.cache import formulas_of
from gainassay.forms.meaningful import Formulas
from gainassay.forms.topology import Topology
from gainassay.report import formulas as report

KINDS = ("text", "latex", "mathml", "json")


@click.command()
@click.argument("name", metavar="TOPOLOGY", shell_complete=shared.complete_topologies)
@click.argument("more", metavar="[NAME=VALUE]...", nargs=-1)
@click.option("--as", "kind", type=click.Choice(KINDS), default="text", help="How to show it.")
@shared.json_option
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
def form(
    name: str,
    more: tuple[str, ...],
    kind: str,
    as_json: bool,
    values: tuple[str, ...],
    job: Path | None,
    within: float,
) -> None:
    """Show the gain of TOPOLOGY, a built-in name or a topology file, as ideal gain times correction factor.

    Beside the gain stand input impedance, output impedance and return ratio. Every formula is proved. With
    --at, further [NAME=VALUE]... may follow.
    """
    kind = "json" if as_json else kind
    if more and not values:
        raise click.UsageError(f"{more[0]!r} is one argument too many; numbers to put in follow --at")
    if (values or job) and kind not in ("text", "json"):
        raise click.UsageError("--at and --for print text or JSON")
    if values and job:
        raise click.UsageError("--at and --for ask for different things; give one of the two")
    if job:
        _for_job(name, job, within, kind)
    elif values:
        _at(_chosen(name, library.library()), (*values, *more), kind)
    else:
        topology = _chosen(name, library.library())
        _show(topology, formulas_of(topology), kind)


def _for_job(name: str, job: Path, within: float, kind: str) -> None:
    # Tables and their libraries are needed here alone.
    from gainassay import service, shortened
    from gainassay.report import shortened as short_report

    prepared = service.prepare(job)
    found = shortened.shorten(prepared, _chosen(name, prepared.topologies), within)
    if kind == "json":
        shared.data(short_report.data(found))
    else:
        shared.lines(short_report.text(found, _has_unicode(), _width()))


def _at(topology: Topology, given: tuple[str, ...], kind: str) -> None:
    from gainassay.report.values import filled_in

    absent, numbers = filled_in(topology, given)
    formulas = formulas_of(topology, absent)
    shared.warn(report.feedback_warnings(topology, absent, numbers))
    if kind == "json":
        shared.data(report.numbers_data(topology, formulas, numbers))
    else:
        shared.lines(report.numbers(topology, formulas, numbers, _has_unicode()))


def _show(topology: Topology, formulas: Formulas, kind: str) -> None:
    match kind:
        case "json":
            shared.data(report.data(topology, formulas))
        case "latex":
            shared.lines(report.latex(topology, formulas))
        case "mathml":
            shared.lines(report.mathml(topology, formulas))
        case _:
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
