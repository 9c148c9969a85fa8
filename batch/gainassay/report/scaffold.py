"""A new job with its tables: every key with its meaning, every column, and a small example that runs at once."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence

from gainassay.contracts import documents, tables
from gainassay.forms.library import library

STAGES = (
    {"stage": "level-gain", "topology": "inverting", "r1": "1k", "r2": "10k", "accuracy_pct": "0.5", "tol_pct": "0.1"},
    {"stage": "level-buffer", "topology": "follower", "accuracy_pct": "0.05"},
    {"stage": "flow-gain", "topology": "non_inverting", "r1": "1k", "r2": "47k", "accuracy_pct": "1", "tol_pct": "0.1"},
)
PARTS = (
    {
        **{"part": "example-1", "a_ol_db_min": "100", "a_ol_db_typ": "120", "r_id_min": "1M", "r_o_max": "100"},
        **{"r_icm_min": "100M", "cmrr_db_min": "90", "gbw_min": "1M", "c_id_max": "5p", "c_icm_max": "3p"},
    },
    {
        **{"part": "example-2", "a_ol_db_typ": "90", "r_id_typ": "1e12", "r_o_typ": "50"},
        **{"r_icm_typ": "1e12", "cmrr_db_typ": "80", "gbw_typ": "5M", "c_id_typ": "3p", "c_icm_typ": "3p"},
    },
)
"""Invented, as a user's own rows will take their place."""


def files() -> dict[str, str]:
    """The files of a new job, by name."""
    header = {"stages": _stage_header(), "parts": [column.name for column in tables.columns("parts")]}
    rows = {"stages": STAGES, "parts": PARTS}
    found = {f"{name}.csv": _csv(header[name], rows[name]) for name in header}
    empty = {f"{name}_empty.csv": _csv(header[name], ()) for name in header}
    return {"job.toml": "\n".join(_job()) + "\n", **found, **empty}


def _stage_header() -> list[str]:
    """The columns of a stage table for the topologies of the example."""
    used = {row["topology"] for row in STAGES}
    kinds = {e.name: e.kind for name, topology in library().items() if name in used for e in topology.elements}
    return list(tables.stage_columns(kinds))


def _csv(header: Sequence[str], rows: Sequence[Mapping[str, str]]) -> str:
    lines = [header, *([row.get(name, "") for name in header] for row in rows)]
    return "".join(",".join(line) + "\n" for line in lines)


def _job() -> Iterator[str]:
    """The job: the two lines that it needs, and every other key in a comment."""
    yield f"# {documents.schema('job')['description']}"
    yield "# A key behind a '#' is not in force; the value beside it is what holds then."
    yield "# What is said of stages goes for parts, too."
    yield "# Delete the columns of parts.csv that you have no numbers for: a blank cell is a number that is missing."
    yield ""
    yield 'stages.from = "stages.csv"'
    yield 'parts.from  = "parts.csv"'
    for key in _keys():
        yield ""
        yield f"# {key.meaning}"
        yield f"# {_named(key.path)} = {key.default or '...'}"


def _keys() -> Iterator[documents.Key]:
    """The keys that hold values; those of both tables once."""
    keys = documents.keys("job")
    paths = {key.path for key in keys}
    for key in keys:
        has_own = any(path.startswith((f"{key.path}.", f"{key.path}[]")) for path in paths)
        stands_above = key.path.endswith(".from") or key.path.replace("parts.", "stages.", 1) in paths - {key.path}
        if not has_own and not stands_above:
            yield key


def _named(path: str) -> str:
    """A key as a line of the job names it; one of a list of tables behind the list's heading."""
    head, _, rest = path.partition("[].")
    return f"[[{head}]] {rest}" if rest else path
