"""TOML documents: every fault is told, with the place and what is wanted, and nothing in them is executed."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import pytest

from gainassay import resources
from gainassay.contracts import documents
from gainassay.errors import InputError

if TYPE_CHECKING:
    from conftest import CommandLineHere, JobWriter

GOOD = '[stages]\nfrom = "stages.csv"\n[parts]\nfrom = "parts.csv"\n'

ATTACK = "__import__('os').system('touch executed')"


def faults(folder: Path, content: str | bytes, kind: str = "job") -> list[str]:
    """The faults of a document, a line each, without the file's name."""
    path = folder / "document.toml"
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    with pytest.raises(InputError) as refused:
        documents.read_toml(path, kind)
    lines = str(refused.value).splitlines()
    assert all(line.startswith(f"{path}: ") for line in lines)
    return [line.removeprefix(f"{path}: ") for line in lines]


@pytest.mark.parametrize(
    ("more", "wanted"),
    [
        ("[results]\nfoldre = 'x'", "in [results]: unknown key 'foldre'; did you mean 'folder'?"),
        ("[result]\nfolder = 'x'", "unknown key 'result'; did you mean 'results'?"),
        ("[assume]\na_lo = { value = 1 }", "in [assume]: unknown key 'a_lo'; did you mean 'a_ol'?"),
        ("[judge]\nzzz = 1", "in [judge]: unknown key 'zzz'; the keys are guard_band_pct, basis, phase_margin_min_deg"),
    ],
)
def test_an_unknown_key_names_the_nearest(tmp_path: Path, more: str, wanted: str) -> None:
    assert faults(tmp_path, GOOD + more) == [wanted]


def test_every_fault_is_listed(tmp_path: Path) -> None:
    found = faults(tmp_path, "[stages]\nform = 'x'\n[results]\nrows = 'some'\nterms = 'yes'\n")
    assert len(found) == 5
    for words in ("'parts' is missing", "'from' is missing", "'form'", "results.rows", "results.terms"):
        assert any(words in fault for fault in found), words


@pytest.mark.parametrize(
    ("more", "place", "wanted"),
    [
        ("[results]\nfolder = 3", "results.folder is 3", "the folder of the runs"),
        ("[results]\nformats = 'csv'", "results.formats is 'csv'", "a list of"),
        ("[results]\nformats = []", "results.formats is []", "a list of"),
        ("[results]\nformats = ['xls']", "results.formats.0 is 'xls'", '"parquet" or "csv"'),
        ("[results]\nrows = 1979-05-27", "results.rows is", '"not passing"'),
        ("[assume]\nr_o = 100", "assume.r_o is 100", "one or more of typical_times, value, hot_times, change_pct"),
        ("[assume]\nr_o = {}", "assume.r_o is {}", "one or more of typical_times, value, hot_times, change_pct"),
        ("[assume]\nr_o = { value = 0 }", "assume.r_o.value is 0", "a number above 0"),
        ("[assume]\nr_o = { value = '100' }", "assume.r_o.value is '100'", "a number above 0"),
        ("[assume]\nr_o = { value = true }", "assume.r_o.value is true", "a number above 0"),
        ("[assume]\na_ol = { typical_times = 1.5 }", "assume.a_ol.typical_times is 1.5", "up to 1"),
        ("[assume]\na_ol = { typical_times = 0 }", "assume.a_ol.typical_times is 0", "above 0"),
        ("[assume]\nr_id = { typical_times = 2 }", "assume.r_id.typical_times is 2", "up to 1"),
        ("[assume]\nr_o = { typical_times = 0.5 }", "assume.r_o.typical_times is 0.5", "1 or more"),
    ],
)
def test_a_wrong_value_says_what_stands_there_and_what_is_wanted(
    tmp_path: Path, more: str, place: str, wanted: str
) -> None:
    (fault,) = faults(tmp_path, GOOD + more)
    assert fault.startswith(place)
    assert wanted in fault


@pytest.mark.parametrize("number", ["nan", "-nan", "inf", "-inf", "1e400"])
def test_numbers_are_finite(tmp_path: Path, number: str) -> None:
    found = faults(tmp_path, f"{GOOD}[assume]\nr_o = {{ typical_times = {number} }}")
    assert any("assume.r_o.typical_times" in fault and "finite" in fault for fault in found)


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"x = '\xe9'", "is not UTF-8 text (byte 5)"),
        (b"\xff\xfex\x00=\x001\x00", "is not UTF-8 text (byte 0)"),
        (b"\x00\x01\x02", "is not valid TOML"),
        ("[stages\nfrom", "is not valid TOML"),
        ("{}", "is not valid TOML"),
        (f"{GOOD}[parts]\nfrom = 'x'", "is not valid TOML"),
        ("x = " + "[" * 5000 + "]" * 5000, "is not valid TOML"),
        ("", "the key 'stages' is missing"),
    ],
)
def test_a_file_that_is_no_document(tmp_path: Path, content: str | bytes, words: str) -> None:
    assert words in faults(tmp_path, content)[0]


@pytest.mark.parametrize(
    "more",
    [
        pytest.param(".".join(["a"] * 5000) + " = 1", id="keys nested 5000 deep"),
        pytest.param("x = " + "[" * 200 + "]" * 200, id="lists nested 200 deep"),
        pytest.param(f"[assume]\nr_o = {{ value = 1{'0' * 400} }}", id="an integer of 401 digits"),
        pytest.param(f"[assume]\nr_o = {{ value = 1{'0' * 5000} }}", id="an integer of 5001 digits"),
    ],
)
def test_an_absurd_document_is_refused(tmp_path: Path, more: str) -> None:
    assert faults(tmp_path, GOOD + more)


def test_a_missing_file_and_a_folder(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="there is no such file"):
        documents.read_toml(tmp_path / "none.toml", "job")
    with pytest.raises(InputError, match="cannot be read"):
        documents.read_toml(tmp_path, "job")


@pytest.mark.parametrize("place", ['"inverting"', '"sum"', "r1 ", "u1"])
def test_text_in_a_topology_file_is_data(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, place: str) -> None:
    monkeypatch.chdir(tmp_path)
    lines = (resources.topologies() / "inverting.toml").read_text(encoding="utf-8").splitlines()
    content = "\n".join(line.replace(place, f'"{ATTACK}"') for line in lines if not line.startswith("summary"))
    assert "a name of lower-case letters" in faults(tmp_path, f'summary = "x"\n{content}', "topology")[0]
    assert not (tmp_path / "executed").exists()


def test_text_in_a_table_or_a_command_is_data(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, here: CommandLineHere, write_job: JobWriter
) -> None:
    monkeypatch.chdir(tmp_path)
    row = {"stage": "level", "topology": ATTACK, "r1": ATTACK, "accuracy_pct": "1"}
    err = here("check", write_job(stages=[row]), status=2).err
    assert "is no topology that is known" in err
    assert "is not a number" in err
    assert "there is no topology" in here("form", ATTACK, status=2).err
    assert not list(tmp_path.rglob("executed"))
