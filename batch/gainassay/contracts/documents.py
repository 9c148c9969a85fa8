"""TOML documents, held against the JSON Schema files under schemas/."""

from __future__ import annotations

import json
import math
import tomllib
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from difflib import get_close_matches
from functools import cache
from pathlib import Path
from typing import Any

from gainassay import resources
from gainassay.errors import InputError


def read_toml(path: Path, kind: str) -> dict[str, Any]:
    """The document in a TOML file, checked against `schemas/<kind>.schema.json`.

    Raises
    ------
    InputError
        If the file cannot be read, is no TOML, or does not follow the schema; every fault is listed.
    """
    try:
        document = tomllib.loads(path.read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise InputError(f"{path}: there is no such file") from None
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror or error}") from None
    except UnicodeDecodeError as error:
        raise InputError(f"{path}: is not UTF-8 text (byte {error.start}); save it as UTF-8") from None
    except (ValueError, RecursionError) as error:
        raise InputError(f"{path}: is not valid TOML: {error}") from None
    try:
        faults = [*_not_finite(document, ""), *_faults(document, kind)]
    except RecursionError:
        raise InputError(f"{path}: is nested too deeply") from None
    if faults:
        raise InputError("\n".join(f"{path}: {fault}" for fault in faults))
    return document


@cache
def schema(kind: str) -> dict[str, Any]:
    """The JSON Schema of a kind of document."""
    found: dict[str, Any] = json.loads((resources.schemas() / f"{kind}.schema.json").read_text(encoding="utf-8"))
    return found


@dataclass(frozen=True)
class Key:
    """A key of a kind of document, with what its schema says of it."""

    path: str
    meaning: str
    default: str


def keys(kind: str) -> list[Key]:
    """Every key of a kind of document, in the order of its schema; those of a list's tables as `list[].key`."""
    return list(_keys(schema(kind), schema(kind), ""))


def _keys(node: dict[str, Any], root: dict[str, Any], path: str) -> Iterator[Key]:
    for name, given in node.get("properties", {}).items():
        own = f"{path}.{name}" if path else name
        found = _resolved(given, root)
        default = json.dumps(found["default"]) if "default" in found else ""
        yield Key(own, found.get("description") or found.get("title", ""), default)
        items = _resolved(found.get("items", {}), root)
        yield from _keys(items, root, f"{own}[]") if "properties" in items else _keys(found, root, own)


def _resolved(node: dict[str, Any], root: dict[str, Any]) -> dict[str, Any]:
    """A part of a schema with what it refers to; what it says itself comes first."""
    found: dict[str, Any] = {}
    for other in [*node.get("allOf", []), *([node] if "$ref" in node else [])]:
        place: Any = root
        for step in other.get("$ref", "#").split("/")[1:]:
            place = place[step]
        found |= place if "$ref" in other else other
    properties = {**found.get("properties", {}), **node.get("properties", {})}
    merged = {**found, **node}
    return {**merged, "properties": properties} if properties else merged


def nearest(name: str, known: Iterable[str]) -> str:
    """`; did you mean '...'?` with the nearest known name, or nothing if none is near."""
    by_folded = {other.casefold(): other for other in known}
    matches = get_close_matches(name.casefold(), list(by_folded), n=1, cutoff=0.6)
    return f"; did you mean '{by_folded[matches[0]]}'?" if matches else ""


def _faults(document: dict[str, Any], kind: str) -> Iterator[str]:
    from jsonschema import Draft202012Validator

    validator = Draft202012Validator(schema(kind))
    for error in sorted(validator.iter_errors(document), key=lambda e: [str(step) for step in e.absolute_path]):
        yield from _explain(error)


def _not_finite(value: Any, place: str) -> Iterator[str]:
    """Faults for `nan` and `inf`, which TOML allows and no bound of a schema catches."""
    if isinstance(value, int) and abs(value) > 2**63:
        yield f"{place} is an integer beyond 64 bits; wanted is a smaller number"
    if isinstance(value, float) and not math.isfinite(value):
        yield f"{place} is {value}; wanted is a finite number"
    items = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, item in items:
        yield from _not_finite(item, f"{place}.{key}" if place else str(key))


def _explain(error: Any) -> Iterator[str]:
    """A schema validator's finding, in words: where, what stands there, what is wanted."""
    place = ".".join(str(step) for step in error.absolute_path)
    inside = f"in [{place}]: " if place else ""
    found = _shown(error.instance)
    match error.validator:
        case "additionalProperties":
            known = error.schema.get("properties", {})
            for key in error.instance:
                if key not in known:
                    listed = ", ".join(known)
                    yield f"{inside}unknown key {_shown(key)}{nearest(key, known) or f'; the keys are {listed}'}"
        case "required":
            for key in error.validator_value:
                if key not in error.instance:
                    wanted = error.schema.get("properties", {}).get(key, {}).get("description", "")
                    yield f"{inside}the key '{key}' is missing{f': {wanted}' if wanted else ''}"
        case _ if "propertyNames" in error.absolute_schema_path:
            yield f"{inside}{found} is no name; wanted is {_wanted(error)}"
        case _:
            yield f"{place or 'the document'} is {found}; wanted is {_wanted(error)}"


def _wanted(error: Any) -> str:
    described = error.schema.get("description")
    return str(described or error.message)


def _shown(value: Any) -> str:
    text = repr(value) if isinstance(value, str) else json.dumps(value, default=str)
    return text if len(text) <= 80 else text[:77] + "..."
