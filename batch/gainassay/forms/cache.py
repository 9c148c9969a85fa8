"""Derived forms, kept on disk under a hash of the topology and of the code that derives them."""

from __future__ import annotations

import contextlib
import hashlib
import json
import logging
import os
import tempfile
from dataclasses import asdict
from functools import cache
from pathlib import Path
from typing import Any

from platformdirs import user_cache_path

from gainassay.forms import soundness
from gainassay.forms.form import Form, Ratio, derive
from gainassay.forms.topology import Topology

log = logging.getLogger(__name__)

DERIVING_CODE = ("departures.py", "form.py", "multiaffine.py", "nodal.py", "soundness.py", "topology.py")
"""Files of this room whose change makes every kept form stale."""


def folder() -> Path:
    """Where forms are kept: `$GAINASSAY_CACHE`, else the user's cache folder."""
    chosen = os.environ.get("GAINASSAY_CACHE")
    return Path(chosen) if chosen else user_cache_path("gainassay", appauthor=False)


def form_of(topology: Topology) -> Form:
    """The form of a topology: read from the cache, or derived and kept there.

    A cache entry that is damaged in any way is derived anew. A cache folder that cannot be written costs
    time, not the run.

    Raises
    ------
    InputError
        If the topology makes no sense, or has no form.
    """
    path = folder() / "forms" / f"{key(topology)}.json"
    kept = _read(path)
    if kept is not None:
        return kept
    soundness.network(topology)
    form = derive(topology)
    soundness.function(topology, form)
    _write(path, form)
    return form


def key(topology: Topology) -> str:
    """SHA-256 of the topology's content and of the deriving code."""
    return hashlib.sha256(f"{topology.content_hash()} {_code_hash()}".encode()).hexdigest()


@cache
def _code_hash() -> str:
    here = Path(__file__).parent
    return hashlib.sha256(b"\0".join((here / name).read_bytes() for name in DERIVING_CODE)).hexdigest()


def content_hash(form: Form) -> str:
    """SHA-256 of a form's content."""
    return hashlib.sha256(json.dumps(asdict(form), sort_keys=True).encode()).hexdigest()


def _read(path: Path) -> Form | None:
    try:
        entry = json.loads(path.read_text(encoding="utf-8"))
        form = _form(entry["form"])
        intact: bool = content_hash(form) == entry["sha256"]
    except FileNotFoundError:
        return None
    except (OSError, ValueError, KeyError, TypeError, AttributeError, RecursionError):
        intact = False
    if not intact:
        log.warning("%s: damaged cache entry; the form is derived anew", path)
        return None
    return form


def _write(path: Path, form: Form) -> None:
    """Write aside, then rename: another process sees the whole entry or none."""
    entry = json.dumps({"sha256": content_hash(form), "form": asdict(form)})
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handle, aside = tempfile.mkstemp(dir=path.parent, suffix=".aside")
        try:
            with os.fdopen(handle, "w", encoding="utf-8") as file:
                file.write(entry)
            Path(aside).replace(path)
        except OSError:
            with contextlib.suppress(OSError):
                Path(aside).unlink()
            raise
    except OSError as error:
        log.warning("%s: the form cannot be kept for the next run: %s", path, error.strerror or error)


def _form(data: dict[str, Any]) -> Form:
    return Form(
        topology=data["topology"],
        elements=tuple(data["elements"]),
        kinds=tuple(data["kinds"]),
        departures=tuple((amplifier, symbol) for amplifier, symbol in data["departures"]),
        monomials=tuple(tuple(monomial) for monomial in data["monomials"]),
        terms=tuple(data["terms"]),
        gain_ideal=_ratio(data["gain_ideal"]),
        contrasts=tuple(_ratio(ratio) for ratio in data["contrasts"]),
        loadings=tuple(_ratio(ratio) for ratio in data["loadings"]),
    )


def _ratio(data: dict[str, Any]) -> Ratio:
    def polynomial(terms: list[Any]) -> tuple[tuple[int, tuple[int, ...]], ...]:
        return tuple((int(value), tuple(int(e) for e in exponents)) for value, exponents in terms)

    return Ratio(polynomial(data["numerator"]), polynomial(data["denominator"]))
