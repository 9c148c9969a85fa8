"""A committed run: what its files hold, and that the manifest and the schemas say so."""

from __future__ import annotations

import csv
import hashlib
import json
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from gainassay import resources, service
from gainassay.errors import InputError
from gainassay.runs import folder as run_folder
from gainassay.runs import summaries

if TYPE_CHECKING:
    from conftest import JobWriter

FORMULA_LIKE = ("=1+1", "+x", "@y", "-z")

STAGES = f"""stage,topology,r_source,r1,r2,r3,r4,accuracy_pct,target_gain,tol_pct
{FORMULA_LIKE[0]},inverting,,1k,10k,,,1,,0.1
{FORMULA_LIKE[1]},inverting,,1k,100k,,,0.1,-101,0.01
{FORMULA_LIKE[2]},difference,,1k,10k,1k,10k,1,,0.1
"a, ""quoted"" one",non_inverting_source,100k,1k,10k,,,1,,
rejected,inverting,,,-1k,,,1,,
"""

PARTS = f"""part,a_ol_min,a_ol_typ,r_id_min,r_o_max
{FORMULA_LIKE[3]},100000,,1M,100
guaranteed,10000000,,1G,1
typical,,10000000,1G,1
rejected,-1,,,
"""

EVERYTHING = "terms = true\nneed = true\nviews = true\nmargins = true\nstability = true\n"
RESULTS = f'[results]\nformats = ["csv", "parquet"]\n{EVERYTHING}'


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A committed run with everything that can be asked for."""
    home = tmp_path_factory.mktemp("job")
    (home / "stages.csv").write_text(STAGES, encoding="utf-8")
    (home / "parts.csv").write_text(PARTS, encoding="utf-8")
    (home / "job.toml").write_text(f'[stages]\nfrom = "stages.csv"\n[parts]\nfrom = "parts.csv"\n{RESULTS}')
    return service.screen(service.prepare(home / "job.toml")).folder


def manifest(run: Path) -> dict[str, Any]:
    """What `run.json` says."""
    found: dict[str, Any] = json.loads((run / "run.json").read_text(encoding="utf-8"))
    return found


def verdicts(run: Path) -> list[dict[str, Any]]:
    """All rows of the verdict tables."""
    return [row for path in sorted(run.glob("verdicts/*.parquet")) for row in pq.read_table(path).to_pylist()]


def read_csv(path: Path) -> list[dict[str, str]]:
    """The rows of a CSV file, as the standard library reads it."""
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def test_the_manifest_lists_every_file_with_size_rows_and_hash(run: Path) -> None:
    present = {path.relative_to(run).as_posix() for path in run.rglob("*") if path.is_file()}
    listed = {file["path"]: file for file in manifest(run)["files"]}
    assert set(listed) == present - {"run.json"}
    for name, file in listed.items():
        content = (run / name).read_bytes()
        rows = pq.read_metadata(run / name).num_rows if name.endswith("parquet") else len(read_csv(run / name))
        assert file == {
            "path": name,
            "size": len(content),
            "rows": rows,
            "sha256": hashlib.sha256(content).hexdigest(),
        }


def test_the_manifest_names_inputs_forms_and_versions(run: Path) -> None:
    found = manifest(run)
    assert found["run"] == run.name
    home = run.parent.parent
    for name in ("stages", "parts"):
        assert found["inputs"][name]["sha256"] == hashlib.sha256((home / f"{name}.csv").read_bytes()).hexdigest()
    assert {n: (t["rows"], t["used"], t["rejected"]) for n, t in found["inputs"].items()} == {
        "stages": (5, 4, 1),
        "parts": (4, 3, 1),
    }
    assert set(found["forms"]) == {"difference", "inverting", "non_inverting_source"}
    assert {"gainassay", "python", "numpy", "sympy"} <= set(found["versions"])
    assert found["job"]["content"]["results"]["terms"] is True


def test_counts_of_the_manifest_and_of_both_summaries_are_those_of_the_rows(run: Path) -> None:
    rows, found = verdicts(run), manifest(run)
    assert found["pairs"] == len(rows) == 12
    for verdict, count in found["verdicts"].items():
        assert count == sum(row["verdict"] == verdict for row in rows)
        for key in ("stage", "part"):
            for summary in pq.read_table(run / f"{key}s.parquet").to_pylist():
                mine = [row for row in rows if row[key] == summary[key]]
                assert summary[verdict] == sum(row["verdict"] == verdict for row in mine)
    for term, count in found["dominant_terms"].items():
        assert count == sum(row["dominant_term"] == term for row in rows)


def test_rows_are_ordered_by_topology_stage_and_part(run: Path) -> None:
    keys = [(row["topology"], row["stage"], row["part"]) for row in verdicts(run)]
    assert keys == sorted(keys)
    assert len(set(keys)) == 12


def test_the_best_part_has_the_smallest_share_of_the_limit(run: Path) -> None:
    rank = {"pass": 0, "unproven": 1, "fail": 2}
    for stage in pq.read_table(run / "stages.parquet").to_pylist():
        mine = [row for row in verdicts(run) if row["stage"] == stage["stage"]]
        best = min(mine, key=lambda row: (rank[row["verdict"]], row["limit_used"]))
        assert (stage["best_part"], stage["best_limit_used"]) == (best["part"], best["limit_used"])


@pytest.mark.parametrize(
    ("file", "schema"),
    [("verdicts", "verdicts"), ("stages.parquet", "stage_summary"), ("parts.parquet", "part_summary")],
)
def test_columns_carry_the_unit_and_meaning_of_the_schema(run: Path, file: str, schema: str) -> None:
    fields = json.loads((resources.schemas() / f"{schema}.table.json").read_text(encoding="utf-8"))["fields"]
    described = {field["name"]: field for field in fields}
    for path in (run / file).glob("*.parquet") if file == "verdicts" else [run / file]:
        found = pq.read_schema(path)
        # Of what the parts table does not model nothing is needed.
        shown = [name for name in described if "<" not in name and name not in ("need_r_icm", "need_cmrr")]
        assert [name for name in found.names if not name.startswith("term_")] == shown
        for field in found:
            wanted = described.get(field.name) or described["term_<name>_ppm"]
            assert field.metadata[b"unit"].decode() == wanted.get("unit", "")
            assert field.metadata[b"meaning"].decode() == wanted["description"]


def test_the_terms_sum_to_the_error(run: Path) -> None:
    for row in verdicts(run):
        terms = [value for name, value in row.items() if name.startswith("term_") and value is not None]
        magnitude = sum(map(abs, terms))
        assert sum(terms) == pytest.approx(row["error_worst_ppm"], abs=1e-12 * magnitude, rel=0)
        assert max(terms, key=abs) == row["dominant_ppm"] == row[f"term_{row['dominant_term']}_ppm"]


def test_a_term_that_a_topology_does_not_have_is_null(run: Path) -> None:
    for row in verdicts(run):
        assert (row["term_r3.tolerance_ppm"] is None) == (row["topology"] != "difference")


def test_limit_used_is_the_share_of_the_limit(run: Path) -> None:
    for row in verdicts(run):
        assert row["limit_used"] == pytest.approx(abs(row["error_worst_ppm"]) / row["limit_ppm"], rel=1e-14)
        assert (row["limit_used"] > 1) == (row["verdict"] == "fail")


def harmless(text: str) -> str:
    """Text as a CSV file for spreadsheets holds it."""
    return f"'{text}" if text in FORMULA_LIKE else text


def test_a_csv_holds_the_rows_of_the_parquet_file_and_no_formula(run: Path) -> None:
    for path in run.glob("verdicts/*.parquet"):
        text = read_csv(path.with_suffix(".csv"))
        rows = pq.read_table(path).to_pylist()
        assert len(text) == len(rows)
        for written, row in zip(text, rows, strict=True):
            for name, value in row.items():
                if isinstance(value, str):
                    assert written[name] == harmless(value)
                else:
                    assert (float(written[name]) if written[name] else None) == value


def test_rejected_cells_are_listed_with_source_row_column_value_and_reason(run: Path) -> None:
    home = run.parent.parent
    assert [tuple(row.values()) for row in read_csv(run / "rejected.csv")] == [
        (str(home / "parts.csv"), "5", "rejected", "a_ol_min", "-1", "must be above 0 V/V"),
        (str(home / "stages.csv"), "6", "rejected", "r1", "", "is blank, but topology 'inverting' needs r1"),
        (str(home / "stages.csv"), "6", "rejected", "r2", "'-1k", "must be at least 0 ohm"),
    ]


@pytest.fixture
def screened(write_job: JobWriter) -> Callable[[str], Path]:
    """Screens the same tables with other results."""
    return lambda results: (
        service.screen(service.prepare(write_job(f"[results]\n{results}\n", stages=STAGES, parts=PARTS))).folder
    )


def test_rows_that_do_not_pass(run: Path, screened: Callable[[str], Path]) -> None:
    found = verdicts(
        screened('rows = "not passing"\nterms = true\nneed = true\nviews = true\nmargins = true\nstability = true')
    )
    assert found == [row for row in verdicts(run) if row["verdict"] != "pass"]
    assert 0 < len(found) < 12


def test_no_rows(run: Path, screened: Callable[[str], Path]) -> None:
    found = screened('rows = "none"')
    assert verdicts(found) == []
    assert manifest(found)["verdicts"] == manifest(run)["verdicts"]
    assert (found / "stages.parquet").read_bytes() == (run / "stages.parquet").read_bytes()


def test_terms_only_on_request(screened: Callable[[str], Path]) -> None:
    assert not any(name.startswith("term_") for row in verdicts(screened("terms = false")) for name in row)


@pytest.mark.parametrize("folder", ["stages.csv", "stages.csv/runs", "x" * 300, "\\u0000"])
def test_results_that_cannot_be_written_end_the_run(write_job: JobWriter, folder: str) -> None:
    job = write_job(f'[results]\nfolder = "{folder}"\n')
    before = sorted(job.parent.rglob("*"))
    with pytest.raises(InputError):
        service.screen(service.prepare(job))
    assert sorted(job.parent.rglob("*")) == before


def test_each_run_has_a_folder_of_its_own(write_job: JobWriter) -> None:
    prepared = service.prepare(write_job())
    folders = {service.screen(prepared).folder for _ in range(3)}
    assert len(folders) == 3


def test_a_run_that_fails_leaves_nothing(write_job: JobWriter, monkeypatch: pytest.MonkeyPatch) -> None:
    prepared = service.prepare(write_job())

    def fail(*_: object) -> pa.Table:
        raise MemoryError

    monkeypatch.setattr(summaries, "part_summary", fail)
    with pytest.raises(MemoryError):
        service.screen(prepared)
    assert not prepared.job.results.folder.exists()


@pytest.mark.parametrize("content", ["", "{", "{}", "[1]", "null", '{"run": "x"}', "\x00", None])
def test_a_folder_without_a_whole_manifest_is_no_run(tmp_path: Path, content: str | None) -> None:
    (tmp_path / "20310203T040506Z-00000000").mkdir()
    if content is not None:
        (tmp_path / "20310203T040506Z-00000000" / "run.json").write_text(content)
    found = run_folder.listed(tmp_path)
    assert (found.runs, found.unreadable) == ((), ("20310203T040506Z-00000000",))


EXTREME = [
    ({}, {"a_ol_min": "1e-320"}),
    ({}, {"r_id_min": "1e-320"}),
    ({}, {"a_ol_min": "1e-308", "r_o_max": "1e308"}),
    ({"target_gain": "1e-320"}, {}),
    ({"target_gain": "1e308"}, {}),
    ({"accuracy_pct": "1e-320"}, {}),
    ({"r1": "1e-300", "r2": "1e300"}, {}),
]


def extreme_job(write_job: JobWriter, stage: dict[str, str], part: dict[str, str]) -> Path:
    """A usual stage and part, and beside them one with an extreme number."""
    usual = {"stage": "usual", "topology": "inverting", "r1": "1k", "r2": "1k", "accuracy_pct": "1", "target_gain": ""}
    amp = {"part": "usual", "a_ol_min": "100000", "r_id_min": "1M", "r_o_max": "100"}
    odd = {"stage": "extreme"} if stage else {"part": "extreme"}
    return write_job(
        stages=[usual, *([usual | stage | odd] if stage else [])], parts=[amp, *([amp | part | odd] if part else [])]
    )


@pytest.mark.filterwarnings("ignore::RuntimeWarning")
@pytest.mark.parametrize(("stage", "part"), EXTREME)
def test_nothing_passes_because_a_number_overflows(
    write_job: JobWriter, stage: dict[str, str], part: dict[str, str]
) -> None:
    rows = verdicts(service.screen(service.prepare(extreme_job(write_job, stage, part))).folder)
    verdict_of = {(row["stage"], row["part"]): row["verdict"] for row in rows}
    assert verdict_of.pop(("usual", "usual")) == "pass"
    assert set(verdict_of.values()) <= {"fail"}


@pytest.mark.parametrize(("stage", "part"), EXTREME)
def test_an_extreme_number_raises_no_warning_of_a_library(
    write_job: JobWriter, stage: dict[str, str], part: dict[str, str]
) -> None:
    service.screen(service.prepare(extreme_job(write_job, stage, part)))
