"""Derived forms and formulas, kept on disk under a hash of the topology and of the code that derives them."""

from __future__ import annotations

import contextlib
import hashlib
import json
import logging
import os
import tempfile
from collections.abc import Callable, Mapping, Sequence
from dataclasses import asdict, replace
from functools import cache
from pathlib import Path
from typing import Any, TypeVar

from platformdirs import user_cache_path

from gainassay.forms import duty, meaningful, soundness
from gainassay.forms.departures import BASIC, Departure
from gainassay.forms.duty import Duty, Work
from gainassay.forms.form import Form, Ratio, derive
from gainassay.forms.meaningful import Formulas
from gainassay.forms.slopes import Polynomial, Slope
from gainassay.forms.topology import Topology

log = logging.getLogger(__name__)

Derived = TypeVar("Derived")

FORM_CODE = ("departures.py", "form.py", "multiaffine.py", "nodal.py", "slopes.py", "soundness.py", "topology.py")
"""Files of this room whose change makes every kept form stale."""

DUTY_CODE = (*FORM_CODE, "duty.py")
"""Files of this room whose change makes every kept duty stale."""

FORMULA_CODE = (*FORM_CODE, "expression.py", "meaningful.py", "proof.py", "render.py", "simplest.py")
"""Files of this room whose change makes every kept formula stale."""


def folder() -> Path:
    """Where forms are kept: `$GAINASSAY_CACHE`, else the user's cache folder."""
    chosen = os.environ.get("GAINASSAY_CACHE")
    return Path(chosen) if chosen else user_cache_path("gainassay", appauthor=False)


def form_of(topology: Topology, departures: Sequence[Departure] = BASIC) -> Form:
    """The form of a topology: read from the cache, or derived and kept there.

    A cache entry that is damaged in any way is derived anew. A cache folder that cannot be written costs
    time, not the run.

    Parameters
    ----------
    departures : sequence of Departure
        Those that its amplifiers have.

    Raises
    ------
    InputError
        If the topology makes no sense, or has no form.
    """

    def made() -> Form:
        soundness.network(topology)
        form = derive(topology, departures)
        soundness.function(topology, form)
        return form

    path = folder() / "forms" / f"{_key(topology, FORM_CODE, {}, departures)}.json"
    return _kept(path, made, asdict, _form)


def duty_of(topology: Topology) -> Duty:
    """What the amplifiers of a topology must do: read from the cache, or derived and kept.

    Raises
    ------
    InputError
        If the topology makes no sense, or has no form.
    """

    def made() -> Duty:
        form_of(topology)
        return duty.derive(topology)

    path = folder() / "duties" / f"{_key(topology, DUTY_CODE, {})}.json"
    return _kept(path, made, asdict, _duty)


def formulas_of(topology: Topology, absent: Mapping[str, str] | None = None) -> Formulas:
    """The formulas of a topology: read from the cache, or derived, proved and kept.

    A formula is made only with its proof, so an entry stands for a proof that was carried out.

    Parameters
    ----------
    absent : Mapping[str, str], optional
        What is left out, by name of the quantity: elements `open` or `short`, amplifiers' quantities `ideal`.

    Raises
    ------
    InputError
        If the topology makes no sense, or has no form.
    """
    states = dict(absent or {})

    def made() -> Formulas:
        form_of(topology)
        return meaningful.derive(topology, states)

    path = folder() / "formulas" / f"{_key(topology, FORMULA_CODE, states)}.json"
    return _kept(path, made, Formulas.to_tree, Formulas.from_tree)


def _key(
    topology: Topology, code: tuple[str, ...], absent: Mapping[str, str], departures: Sequence[Departure] = BASIC
) -> str:
    """SHA-256 of the topology's content, of what is left out and what is in it, and of the deriving code."""
    quantities = [departure.quantity for departure in departures]
    return _sha256([topology.content_hash(), sorted(absent.items()), quantities, _code_hash(code)])


@cache
def _code_hash(names: tuple[str, ...]) -> str:
    here = Path(__file__).parent
    return hashlib.sha256(b"\0".join((here / name).read_bytes() for name in names)).hexdigest()


def content_hash(form: Form) -> str:
    """SHA-256 of a form's content: of N and D, which all the rest of it follows from."""
    return _sha256(asdict(replace(form, contrasts=(), loadings=(), slopes=())))


def _sha256(value: Any) -> str:
    return hashlib.sha256(json.dumps(value, sort_keys=True).encode()).hexdigest()


def _kept(
    path: Path,
    make: Callable[[], Derived],
    encode: Callable[[Derived], dict[str, Any]],
    decode: Callable[[dict[str, Any]], Derived],
) -> Derived:
    """What is kept at `path` if it is there and intact, else what `make` makes, kept there for the next time."""
    try:
        entry = json.loads(path.read_text(encoding="utf-8"))
        if _sha256([path.stem, entry["content"]]) == entry["sha256"]:
            return decode(entry["content"])
        log.warning("%s: damaged; derived anew", path)
    except FileNotFoundError:
        pass
    except (OSError, ValueError, KeyError, TypeError, AttributeError, OverflowError, RecursionError):
        log.warning("%s: damaged; derived anew", path)
    made = make()
    _write(path, encode(made))
    return made


def _write(path: Path, content: dict[str, Any]) -> None:
    """Write aside, then rename: another process sees the whole entry or none."""
    # The name is hashed too: an entry that came under another topology's name is damaged.
    entry = json.dumps({"sha256": _sha256([path.stem, content]), "content": content})
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
        log.warning("%s: cannot be kept for the next time: %s", path, error.strerror or error)


def _form(data: dict[str, Any]) -> Form:
    return Form(
        topology=data["topology"],
        elements=tuple(data["elements"]),
        kinds=tuple(data["kinds"]),
        departures=tuple((amplifier, symbol) for amplifier, symbol in data["departures"]),
        monomials=tuple(tuple(monomial) for monomial in data["monomials"]),
        terms=tuple(data["terms"]),
        gain_ideal=_ratio(data["gain_ideal"]),
        contrasts=_ratios(data["contrasts"]),
        loadings=_ratios(data["loadings"]),
        numerator=_polynomial(data["numerator"]),
        denominator=_polynomial(data["denominator"]),
        slopes=tuple(
            Slope(int(slope["sign"]), _polynomial(slope["terms"]), bool(slope["is_whole"])) for slope in data["slopes"]
        ),
    )


def _duty(data: dict[str, Any]) -> Duty:
    return Duty(
        amplifiers=tuple(data["amplifiers"]),
        of_signal=_work(data["of_signal"]),
        of_bias=None if data["of_bias"] is None else _work(data["of_bias"]),
        feedback=tuple(_ratios(row) for row in data["feedback"]),
    )


def _work(data: dict[str, Any]) -> Work:
    return Work(*(_ratios(data[name]) for name in ("v_out", "i_out", "v_in")))


def _ratios(data: list[Any]) -> tuple[Ratio, ...]:
    return tuple(_ratio(ratio) for ratio in data)


def _ratio(data: dict[str, Any]) -> Ratio:
    return Ratio(_polynomial(data["numerator"]), _polynomial(data["denominator"]))


def _polynomial(terms: list[Any]) -> Polynomial:
    return tuple((int(value), tuple(int(e) for e in exponents)) for value, exponents in terms)
