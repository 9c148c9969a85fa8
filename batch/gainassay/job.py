"""The job file: which tables, which rules, which output."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from gainassay.contracts import documents
from gainassay.errors import InputError


@dataclass(frozen=True)
class StandIn:
    """What stands in for a data-sheet number that a part does not give.

    Attributes
    ----------
    typical_times : float
        The worst case takes the typical figure times this where there is no limit.
    value : float or None
        Stands in where there is neither limit nor typical figure [unit of the quantity].
    hot_times : float
        Over a range of temperatures the worst case takes its figure times this where there is no limit for it.
    change_pct : float or None
        Change of the quantity after a calibration, up or down, where a part does not give it [%].
    """

    typical_times: float = 1.0
    value: float | None = None
    hot_times: float = 1.0
    change_pct: float | None = None


@dataclass(frozen=True)
class Judge:
    """The decision rule.

    Attributes
    ----------
    guard_band_pct : float
        Share of the required accuracy that a pass keeps free [%].
    basis : str
        The weakest evidence that a pass may rest on: `guaranteed` or `typical`.
    """

    guard_band_pct: float
    basis: str


@dataclass(frozen=True)
class Results:
    """Where results go and what they hold.

    Attributes
    ----------
    views : bool
        Whether verdict tables show root-sum-square and Monte Carlo beside the worst case.
    samples : int
        Of each pair, for Monte Carlo.
    """

    folder: Path
    rows: str
    formats: tuple[str, ...]
    terms: bool
    views: bool
    samples: int


@dataclass(frozen=True)
class Job:
    """A job, its paths as seen from the current folder.

    Attributes
    ----------
    path : Path
        The job file.
    document : Mapping[str, Any]
        The file's content, for the manifest.
    assume : Mapping[str, StandIn]
        By data-sheet quantity: `a_ol`, `r_id`, `r_o`.
    """

    path: Path
    document: Mapping[str, Any]
    stages: Path
    parts: Path
    topologies: tuple[Path, ...]
    assume: Mapping[str, StandIn]
    judge: Judge
    results: Results


def read(path: Path) -> Job:
    """The job in a TOML file.

    Raises
    ------
    InputError
        If the file cannot be read or does not follow `schemas/job.schema.json`.
    """
    if not str(path).isprintable():
        raise InputError(f"{str(path)!r}: is not a path in printable UTF-8; rename the folder or the file")
    document = documents.read_toml(path, "job")
    here = path.parent
    results = {**_defaults("results"), **document.get("results", {})}
    return Job(
        path=path,
        document=document,
        stages=here / document["stages"]["from"],
        parts=here / document["parts"]["from"],
        topologies=tuple(here / name for name in document.get("topologies", [])),
        assume={quantity: StandIn(**given) for quantity, given in document.get("assume", {}).items()},
        judge=Judge(**{**_defaults("judge"), **document.get("judge", {})}),
        results=Results(
            folder=here / results["folder"],
            rows=results["rows"],
            formats=tuple(results["formats"]),
            terms=results["terms"],
            views=results["views"],
            samples=results["samples"],
        ),
    )


def _defaults(section: str) -> dict[str, Any]:
    properties = documents.schema("job")["properties"][section]["properties"]
    return {key: value["default"] for key, value in properties.items()}
