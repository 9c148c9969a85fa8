"""Kept forms: read back as they were, and never trusted when damaged."""

from __future__ import annotations

import json
from collections.abc import Callable
from pathlib import Path

import pytest

from gainassay.forms import cache, meaningful
from gainassay.forms.form import derive
from gainassay.forms.library import library

LIBRARY = library()


@pytest.fixture
def kept(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setenv("GAINASSAY_CACHE", str(tmp_path))
    return tmp_path


def entry(kept: Path, kind: str = "forms") -> Path:
    (path,) = (kept / kind).glob("*.json")
    return path


def test_a_second_time_nothing_is_derived(kept: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    first = cache.form_of(LIBRARY["inverting"]), cache.formulas_of(LIBRARY["inverting"])

    def fail(*_: object) -> None:
        raise AssertionError

    monkeypatch.setattr(cache, "derive", fail)
    monkeypatch.setattr(meaningful, "derive", fail)
    assert (cache.form_of(LIBRARY["inverting"]), cache.formulas_of(LIBRARY["inverting"])) == first


@pytest.mark.parametrize("name", LIBRARY)
def test_what_is_kept_is_what_was_derived(kept: Path, name: str) -> None:
    cache.form_of(LIBRARY[name])
    assert cache.form_of(LIBRARY[name]) == derive(LIBRARY[name])


DAMAGES: list[Callable[[str], str]] = [
    lambda text: "",
    lambda text: text[: len(text) // 2],
    lambda text: text.replace("[1,", "[2,", 1),
    lambda text: text.replace("[1,", "[1e999,", 1),
    lambda text: text.replace("inverting", "follower"),
    lambda text: "[]",
    lambda text: "null",
    lambda text: json.dumps({"sha256": json.loads(text)["sha256"], "content": {}}),
    lambda text: "[" * 100_000,
    lambda text: text + "\x00",
]


@pytest.mark.parametrize("damage", DAMAGES, ids=range(len(DAMAGES)))
def test_a_damaged_entry_is_made_anew(
    kept: Path, damage: Callable[[str], str], caplog: pytest.LogCaptureFixture
) -> None:
    form = cache.form_of(LIBRARY["inverting"])
    path = entry(kept)
    whole = path.read_text(encoding="utf-8")
    path.write_text(damage(whole), encoding="utf-8")
    assert cache.form_of(LIBRARY["inverting"]) == form
    assert "damaged" in caplog.text
    assert path.read_text(encoding="utf-8") == whole


def test_an_entry_under_another_topologys_name_is_made_anew(kept: Path) -> None:
    cache.form_of(LIBRARY["summing_2_in2"])
    wrong = entry(kept).read_bytes()
    entry(kept).unlink()
    form = cache.form_of(LIBRARY["summing_2_in1"])
    entry(kept).write_bytes(wrong)
    assert cache.form_of(LIBRARY["summing_2_in1"]) == form


def test_a_cache_that_cannot_be_written_costs_no_more_than_time(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    (tmp_path / "file").write_text("in the way")
    monkeypatch.setenv("GAINASSAY_CACHE", str(tmp_path / "file"))
    assert cache.form_of(LIBRARY["follower"]) == derive(LIBRARY["follower"])
    assert "cannot be kept" in caplog.text


def test_the_listed_code_is_there() -> None:
    here = Path(cache.__file__).parent
    assert all((here / name).is_file() for name in cache.FORMULA_CODE)
