"""Results as Arrow tables, and those as files: unit and meaning of each column come from schemas/."""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from gainassay.contracts import tables
from gainassay.contracts.limits import LIMITS
from gainassay.forms.departures import DEPARTURES
from gainassay.screen import limits
from gainassay.screen.blocks import Screened, accounts
from gainassay.screen.kernel import UNBOUNDED
from gainassay.screen.methods import WORST_CASES
from gainassay.screen.stability import Margins
from gainassay.screen.verdicts import VERDICTS, leaning, reason
from gainassay.screen.views import Views
from gainassay.tables.rejects import PLACE, Reject

PPM = 1e6
ROWS_PER_GROUP = 250_000
FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")
"""A spreadsheet takes a cell that starts with one of these for a formula."""

REPEATED = (
    "stage", "part", "topology", "verdict", "reason", "evidence", "leans_on",
    "gain_ideal", "limit_ppm", "dominant_term", "worst_case", "frequency_hz", "not_checked",
)  # fmt: skip
"""Columns of the verdict table with few different values, which are stored as a dictionary."""


UNCHECKED = tuple(limits.named(code) for code in range(1 << len(LIMITS)))
"""Operating limits that could not be checked, by code."""


def verdict_table(
    screened: Screened,
    rows: str,
    terms: Sequence[str],
    needs: NDArray[np.float64] | None = None,
    margins: bool = False,
    stability: bool = False,
) -> pa.Table:
    """The rows of the verdict table that a chunk gives, ordered by stage and part.

    Parameters
    ----------
    rows : str
        `all` or `not passing`.
    terms : sequence of str
        Terms of the account that get a column.
    needs : ndarray, shape (departures, stages, parts), optional
        What `need.needed` gives for the pairs, a column for each quantity.
    margins : bool
        Whether each operating limit gets a column.
    stability : bool
        Whether the margins get columns.
    """
    verdict = screened.judgement.verdict.ravel()
    is_kept = screened.eligible.ravel() & (rows == "all" or verdict != VERDICTS.index("pass"))
    kept = np.flatnonzero(is_kept)
    shape = screened.judgement.verdict.shape
    stage, part = kept // shape[1], kept % shape[1]
    group, sides, outcome = screened.group, screened.stage_side, screened.outcome
    packed = screened.judgement.leaning.ravel()[kept]
    gain_ideal, reference = (gain[stage, part] for gain in group.method.gains(group.form, sides, outcome))
    nominal = outcome.error_nominal.ravel()[kept]
    unbounded, nothing = outcome.corner.ravel()[kept] == UNBOUNDED, np.full(len(kept), np.nan)

    def number(values: NDArray[np.float64]) -> pa.Array:
        return pa.array(values, mask=~np.isfinite(values))

    def words(codes: NDArray[np.integer], meanings: Sequence[str]) -> pa.Array:
        """Coded words as a dictionary that holds each once: pyarrow writes one with repeats as plain text, whose
        missing cells are whatever lay in memory."""
        once = {meaning: place for place, meaning in enumerate(dict.fromkeys(meanings))}
        place = np.array([once[meaning] for meaning in meanings])
        return pa.DictionaryArray.from_arrays(
            pa.array(place[codes].astype(np.int32), mask=codes < 0), pa.array(list(once), pa.string())
        )

    def meant(codes: NDArray[np.int32], meaning: Callable[[int], str]) -> pa.Array:
        """Codes of words: few of many are used, and only these are looked up."""
        used = np.flatnonzero(np.bincount(codes, minlength=1))
        place = np.zeros(used.max(initial=0) + 1, np.int32)
        place[used] = np.arange(len(used))
        return words(place[codes], [meaning(code) for code in used.tolist()])

    columns = {
        "stage": words(stage, screened.group.stage_names[screened.chunk.stages].tolist()),
        "part": words(part, screened.group.part_names[screened.chunk.parts].tolist()),
        "topology": words(np.zeros(len(kept), np.int32), [screened.group.form.topology]),
        "verdict": words(verdict[kept], VERDICTS),
        "reason": meant(screened.judgement.reason.ravel()[kept], reason),
        "evidence": meant(packed, lambda code: leaning(code).evidence),
        "leans_on": meant(packed, lambda code: leaning(code).leans_on),
        "gain_ideal": number(gain_ideal),
        "gain_nominal": number(reference * (1.0 + nominal)),
        "error_nominal_ppm": number(nominal * PPM),
        "error_worst_ppm": number(outcome.error_worst.ravel()[kept] * PPM),
        "limit_ppm": number(sides.limits[stage] * PPM),
        "limit_used": number(screened.judgement.limit_used.ravel()[kept]),
        "dominant_term": words(outcome.dominant.ravel()[kept], group.dominant_names()),
        "dominant_ppm": number(outcome.dominant_value.ravel()[kept] * PPM),
        "worst_case": words(np.full(len(kept), WORST_CASES.index(group.method.worst_case), np.int32), WORST_CASES),
        "frequency_hz": number(nothing if outcome.hertz is None else outcome.hertz.ravel()[kept]),
        "phase_error_deg": number(nothing if outcome.phase is None else outcome.phase.ravel()[kept]),
    }
    if needs is not None:
        columns |= {
            f"need_{departure.quantity}": number(of.ravel()[kept])
            for departure, of in zip(DEPARTURES, needs, strict=True)
            if screened.group.form.has(departure)
        }
    if screened.views is not None:
        columns |= {name: number(values.ravel()[kept]) for name, values in _views_columns(screened.views).items()}
    if margins:
        bounds = screened.group.bounds.of(screened.chunk.stages, screened.chunk.parts)
        columns |= {f"margin_{name}": number(of.ravel()[kept]) for name, of in limits.margins(bounds)}
        columns["not_checked"] = words(screened.kept.unchecked.ravel()[kept].astype(np.int32), UNCHECKED)
    if screened.margins is not None and stability:
        columns |= {name: number(values.ravel()[kept]) for name, values in _margin_columns(screened.margins).items()}
    if terms:
        found = zip(group.term_names(), accounts(screened), strict=True)
        values = {name: term.ravel()[kept] for name, term in found if name in terms}
        for name in terms:
            columns[f"term_{name}_ppm"] = number(np.where(unbounded, np.nan, values.get(name, nothing)) * PPM)
    return pa.table(list(columns.values()), schema=_schema("verdicts", columns))


def _views_columns(views: Views) -> dict[str, NDArray[np.float64]]:
    return {
        "error_mean_ppm": views.error_mean * PPM,
        "error_u_ppm": views.error_u * PPM,
        "error_rss_ppm": views.error_rss * PPM,
        "yield_mc": views.yield_mc,
        "yield_mc_u": views.yield_mc_u,
    }


def _margin_columns(margins: Margins) -> dict[str, NDArray[np.float64]]:
    return {
        "crossover_hz": margins.crossover_hz,
        "phase_margin_deg": margins.phase_margin_deg,
        "gain_margin_db": margins.gain_margin_db,
    }


def summary_table(table: str, columns: Mapping[str, pa.Array]) -> pa.Table:
    """A table whose columns are those of `schemas/<table>.table.json`."""
    return pa.table(list(columns.values()), schema=_schema(table, columns))


def rejected_table(rejects: Sequence[Reject]) -> pa.Table:
    """The rejected cells, in the order of source, row and column."""
    ordered = sorted(rejects, key=PLACE)
    return summary_table(
        "rejected",
        {
            "source": pa.array([reject.source for reject in ordered], pa.string()),
            "row": pa.array([reject.row for reject in ordered], pa.int64()),
            "name": pa.array([reject.name for reject in ordered], pa.string()),
            "column": pa.array([reject.column for reject in ordered], pa.string()),
            "value": pa.array([reject.value for reject in ordered], pa.string()),
            "reason": pa.array([reject.reason for reject in ordered], pa.string()),
        },
    )


def _schema(table: str, columns: Mapping[str, pa.Array]) -> pa.Schema:
    described = {column.name: column for column in tables.columns(table)}
    any_term = described.get("term_<name>_ppm")
    fields = []
    for name, values in columns.items():
        column = described.get(name, any_term)
        if column is None:
            raise ValueError(f"schemas/{table}.table.json describes no column {name!r}")
        fields.append(pa.field(name, values.type, metadata={"unit": column.unit, "meaning": column.meaning}))
    return pa.schema(fields)


def write_parquet(table: pa.Table, path: Path) -> None:
    """Write a table so that the same table gives the same bytes, and make sure that it is on disk."""
    import pyarrow.parquet as pq

    repeated = [name for name in table.column_names if name in REPEATED]
    floats = [f.name for f in table.schema if pa.types.is_floating(f.type) and f.name not in repeated]
    pq.write_table(
        table,
        path,
        row_group_size=ROWS_PER_GROUP,
        compression="zstd",
        compression_level=1,
        use_dictionary=repeated,
        column_encoding=dict.fromkeys(floats, "BYTE_STREAM_SPLIT"),
    )
    sync(path)


def write_csv(table: pa.Table, path: Path) -> None:
    """Write a table as CSV; text that a spreadsheet would take for a formula gets a leading apostrophe."""
    import pyarrow.csv as pacsv

    pacsv.write_csv(pa.table([_harmless(column) for column in table.columns], names=table.column_names), path)
    sync(path)


def _harmless(column: pa.ChunkedArray) -> pa.Array:
    whole = column.combine_chunks()
    whole = pa.concat_arrays(whole.chunks) if isinstance(whole, pa.ChunkedArray) else whole
    if pa.types.is_dictionary(whole.type):
        harmless = _harmless(pa.chunked_array([whole.dictionary]))
        return pa.DictionaryArray.from_arrays(whole.indices, harmless).cast(pa.string())
    if not pa.types.is_string(whole.type):
        return whole
    return pa.array([f"'{text}" if _is_formula(text) else text for text in whole.to_pylist()], pa.string())


def _is_formula(text: str | None) -> bool:
    """Whether a spreadsheet would take the text for a formula; a number is none."""
    if not text or not text.startswith(FORMULA_STARTS):
        return False
    try:
        float(text)
    except ValueError:
        return True
    return False


def sync(path: Path) -> None:
    """Make sure that a file, or a folder's list of files, is on disk."""
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)
