"""A committed run as pandas tables."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import pandas as pd
import pyarrow.parquet as pq
import pytest

from gainassay import service
from gainassay.errors import InputError
from gainassay.runs import reading

if TYPE_CHECKING:
    from conftest import JobWriter


def test_tables_are_those_of_the_run(write_job: JobWriter) -> None:
    run = service.screen(service.prepare(write_job())).folder
    found = reading.verdicts(run)
    pd.testing.assert_frame_equal(found, pq.read_table(run / "verdicts").to_pandas())
    pd.testing.assert_frame_equal(reading.verdicts(str(run)), found)
    assert reading.stages(str(run))["stage"].tolist() == ["level"]
    assert reading.parts(run)["part"].tolist() == ["amp-1"]


def test_a_changed_file_is_refused(write_job: JobWriter) -> None:
    run = service.screen(service.prepare(write_job())).folder
    (run / "stages.parquet").write_bytes((run / "parts.parquet").read_bytes())
    with pytest.raises(InputError, match="was changed after its commit"):
        reading.stages(run)


def test_a_run_without_verdicts_says_so(write_job: JobWriter) -> None:
    run = service.screen(service.prepare(write_job('[results]\nrows = "none"\n'))).folder
    with pytest.raises(InputError, match="keeps no verdict table"):
        reading.verdicts(run)


def test_any_other_folder_is_no_run(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="is no committed run"):
        reading.parts(tmp_path)
