"""Committed runs as pandas tables, for notebooks and scripts."""

from __future__ import annotations

import json
from pathlib import Path

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from gainassay.errors import InputError
from gainassay.runs.folder import MANIFEST, file_of


def verdicts(run: Path | str) -> pd.DataFrame:
    """The verdict table of a committed run, a row for each pair.

    Parameters
    ----------
    run : Path or str
        The run folder.

    Raises
    ------
    InputError
        If the folder is no committed run, has no verdict table in Parquet, or a file is not what the manifest says.
    """
    run = Path(run)
    listed = [name for name in _files(run) if name.startswith("verdicts/") and name.endswith(".parquet")]
    if not listed:
        raise InputError(f"{run}: the run keeps no verdict table in Parquet; see [results] in its job")
    return _frame([pq.read_table(_intact(run, name)) for name in listed])


def stages(run: Path | str) -> pd.DataFrame:
    """The summary of the stages of a committed run. Raises as `verdicts` does."""
    return _frame([pq.read_table(_intact(Path(run), "stages.parquet"))])


def parts(run: Path | str) -> pd.DataFrame:
    """The summary of the parts of a committed run. Raises as `verdicts` does."""
    return _frame([pq.read_table(_intact(Path(run), "parts.parquet"))])


def _frame(tables: list[pa.Table]) -> pd.DataFrame:
    frame = pa.concat_tables(tables).unify_dictionaries().to_pandas()
    assert isinstance(frame, pd.DataFrame)
    return frame


def _files(run: Path) -> dict[str, str]:
    """SHA-256 of each file of a committed run."""
    try:
        manifest = json.loads((run / MANIFEST).read_text(encoding="utf-8"))
        return {entry["path"]: entry["sha256"] for entry in manifest["files"]}
    except (OSError, ValueError, KeyError, TypeError):
        raise InputError(f"{run}: is no committed run: there is no {MANIFEST} that can be read") from None


def _intact(run: Path, name: str) -> Path:
    path = run / name
    expected = _files(run).get(name)
    if expected is None or not path.is_file() or file_of(run, path, 0).sha256 != expected:
        raise InputError(f"{path}: is not the file that {MANIFEST} lists; the run folder was changed after its commit")
    return path
