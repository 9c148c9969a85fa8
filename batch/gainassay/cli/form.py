"""`gainassay form`."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path

import click

from gainassay.cli import shared
from gainassay.contracts.documents import nearest
from gainassay.errors import InputError
from gainassay.forms import library, listing
from gainassay.forms.cache import content_hash, form_of
from gainassay.forms.topology import Topology


@click.command()
@click.argument("name", metavar="TOPOLOGY")
@shared.json_option
def form(name: str, as_json: bool) -> None:
    """Show the gain of TOPOLOGY, a built-in name or a topology file: ideal gain times correction factor."""
    chosen = _chosen(name)
    found = form_of(chosen)
    if as_json:
        shared.data({**asdict(found), "topology_sha256": chosen.content_hash(), "form_sha256": content_hash(found)})
    else:
        shared.lines(listing.text(chosen, found))


def _chosen(name: str) -> Topology:
    known = library.library()
    if name in known:
        return known[name]
    if name.endswith(".toml"):
        return library.read(Path(name))
    hint = nearest(name, known) or "; `gainassay topologies` lists what there is"
    raise InputError(f"there is no topology {name!r}{hint}")
