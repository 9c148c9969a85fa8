"""The job file: which tables, which rules, which output."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
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
class Comparison:
    """A column of the part table that must be `at_least`, `at_most` or `equals` one of the stage table."""

    part: str
    relation: str
    stage: str


@dataclass(frozen=True)
class Eligible:
    """A rule that says which parts may serve a stage.

    Attributes
    ----------
    name : str
        What counts and messages call it.
    part, stage : tuple[str, ...]
        Columns of the two tables: one, or the low and the high end of a range.
    relation : str
        `at_least`, `at_most`, `equals`, `within` or `covers`.
    """

    name: str
    part: tuple[str, ...]
    relation: str
    stage: tuple[str, ...]

    def comparisons(self) -> tuple[Comparison, ...]:
        """The comparisons, of one column with one other, that the rule comes down to."""
        low, high = self.part[0], self.part[-1]
        match self.relation:
            case "within":
                return Comparison(low, "at_least", self.stage[0]), Comparison(low, "at_most", self.stage[1])
            case "covers":
                return Comparison(low, "at_most", self.stage[0]), Comparison(high, "at_least", self.stage[-1])
            case relation:
                return (Comparison(low, relation, self.stage[0]),)


@dataclass(frozen=True)
class Judge:
    """The decision rule.

    Attributes
    ----------
    guard_band_pct : float
        Share of the required accuracy that a pass keeps free [%].
    basis : str
        The weakest evidence that a pass may rest on: `guaranteed` or `typical`.
    phase_margin_min_deg : float or None
        The least phase margin that a pass must have [degrees]; none: it is not looked at.
    """

    guard_band_pct: float
    basis: str
    phase_margin_min_deg: float | None = None


@dataclass(frozen=True)
class Results:
    """Where results go and what they hold.

    Attributes
    ----------
    views : bool
        Whether verdict tables show root-sum-square and Monte Carlo beside the worst case.
    samples : int
        Of each pair, for Monte Carlo.
    margins : bool
        Whether verdict tables show by how much each operating limit is kept.
    stability : bool
        Whether verdict tables show crossover frequency, phase margin and gain margin.
    """

    folder: Path
    rows: str
    formats: tuple[str, ...]
    terms: bool
    need: bool
    views: bool
    samples: int
    margins: bool = False
    stability: bool = False


@dataclass(frozen=True)
class Heading:
    """What a job says of a column of a table.

    Attributes
    ----------
    ours : str
        The column that it fills.
    theirs : str
        Its name in the table.
    unit : str
        Unit of its numbers that state none; empty: the unit of `ours`.
    value : str or None
        What stands in every row in place of a column of the table.
    """

    ours: str
    theirs: str = ""
    unit: str = ""
    value: str | None = None


@dataclass(frozen=True)
class Source:
    """Where a table lies and how it is written; what a job does not say is empty.

    Attributes
    ----------
    section : str
        The job's section, and so the kind of table: `stages` or `parts`.
    at : str
        A path as seen from the current folder, a pattern of such, the address of a database, or `$NAME` for an
        address in an environment variable.
    """

    section: str
    at: str
    delimiter: str = ""
    encoding: str = ""
    decimal: str = "."
    sheet: str = ""
    header_row: int = 0
    table: str = ""
    query: str = ""
    columns: tuple[Heading, ...] = ()


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
        By data-sheet quantity: `a_ol`, `r_id`, `r_o`, `gbw`, `c_id`.
    eligible : tuple[Eligible, ...]
        Which parts may serve which stages; a part must keep every rule.
    """

    path: Path
    document: Mapping[str, Any]
    stages: Source
    parts: Source
    topologies: tuple[Path, ...]
    assume: Mapping[str, StandIn]
    eligible: tuple[Eligible, ...]
    judge: Judge
    results: Results


def read(path: Path) -> Job:
    """The job in a TOML file.

    Raises
    ------
    InputError
        If the file cannot be read, does not follow `schemas/job.schema.json`, or names two rules alike.
    """
    if not str(path).isprintable():
        raise InputError(f"{str(path)!r}: is not a path in printable UTF-8; rename the folder or the file")
    document = documents.read_toml(path, "job")
    here = path.parent
    results = {**_defaults("results"), **document.get("results", {})}
    return Job(
        path=path,
        document=document,
        stages=_source("stages", document["stages"], here),
        parts=_source("parts", document["parts"], here),
        topologies=tuple(here / name for name in document.get("topologies", [])),
        assume={quantity: StandIn(**given) for quantity, given in document.get("assume", {}).items()},
        eligible=_eligible(path, document.get("eligible", [])),
        judge=Judge(**{**_defaults("judge"), **document.get("judge", {})}),
        results=Results(
            folder=here / results["folder"],
            rows=results["rows"],
            formats=tuple(results["formats"]),
            terms=results["terms"],
            need=results["need"],
            views=results["views"],
            samples=results["samples"],
            margins=results["margins"],
            stability=results["stability"],
        ),
    )


def _eligible(path: Path, given: Iterable[Mapping[str, Any]]) -> tuple[Eligible, ...]:
    rules = tuple(_rule(one) for one in given)
    names = [rule.name for rule in rules]
    repeated = next((name for name in names if names.count(name) > 1), None)
    if repeated is not None:
        raise InputError(f"{path}: two rules of [[eligible]] are called {repeated!r}; give one of them another name")
    return rules


def _rule(given: Mapping[str, Any]) -> Eligible:
    relation = next(key for key in given if key not in ("name", "part"))
    part, stage = (
        tuple([columns] if isinstance(columns, str) else columns) for columns in (given["part"], given[relation])
    )
    name = given.get("name", f"{' to '.join(part)} {relation} {' to '.join(stage)}")
    return Eligible(name, part, relation, stage)


def _source(section: str, given: Mapping[str, Any], here: Path) -> Source:
    options = {key: value for key, value in given.items() if key not in ("from", "columns")}
    columns = tuple(_heading(name, said) for name, said in given.get("columns", {}).items())
    at = given["from"]
    return Source(section, at if is_address(at) else str(here / at), columns=columns, **options)


def is_address(at: str) -> bool:
    """Whether a table's place is the address of a database, or the name of a variable that holds one."""
    return "://" in at or at.startswith("$")


def _heading(name: str, said: str | Mapping[str, str]) -> Heading:
    if isinstance(said, str):
        return Heading(said, name)
    if "value" in said:
        return Heading(name, value=said["value"])
    return Heading(said["is"], name, said.get("unit", ""))


def _defaults(section: str) -> dict[str, Any]:
    properties = documents.schema("job")["properties"][section]["properties"]
    return {key: value.get("default") for key, value in properties.items()}
