"""Exit statuses, and which stream says what."""

from __future__ import annotations

import json
import math
import os
import subprocess
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, NoReturn

import pytest

from gainassay import service
from gainassay.cli import shared

if TYPE_CHECKING:
    from conftest import CommandLine, CommandLineHere, JobWriter

STAGES = """stage,topology,r1,r2,accuracy_pct
easy,inverting,1k,1k,1
hard,inverting,1k,1M,0.0001
"""

PARTS = """part,a_ol_min,a_ol_typ,r_id_min,r_o_max
limits,1000000,,1G,10
typical,,1000000,1G,10
"""

BAD_ROW = "bad,inverting,x,1k,1\n"


def whole(text: str) -> Any:
    """JSON, without the words for numbers that JSON does not have."""

    def refuse(word: str) -> NoReturn:
        raise AssertionError(f"{word} is no JSON")

    return json.loads(text, parse_constant=refuse)


def test_results_go_to_standard_output_and_remarks_to_standard_error(
    gainassay: CommandLine, write_job: JobWriter
) -> None:
    job = write_job(
        stages=STAGES, parts=PARTS.replace("part,", "part,colour,").replace("s,", "s,,").replace("l,,", "l,,,")
    )
    done = gainassay("screen", job)
    assert done.out.startswith("pairs     4\n")
    assert str(job.parent / "runs") in done.out
    assert done.err == f"warning: {job.parent / 'parts.csv'}: column 'colour' is not known and not read\n"


@pytest.mark.parametrize(
    ("conditions", "bad_row", "status", "words"),
    [
        ([], True, 0, ""),
        (["fail"], False, 3, "as asked with --fail-on: 2 fail"),
        (["unproven"], False, 3, "as asked with --fail-on: 1 unproven"),
        (["rejected"], False, 0, ""),
        (["rejected"], True, 3, "as asked with --fail-on: 1 rejected"),
        (["fail", "unproven", "rejected"], True, 3, "as asked with --fail-on: 2 fail, 1 unproven, 1 rejected"),
    ],
)
def test_fail_on(
    here: CommandLineHere, write_job: JobWriter, conditions: Sequence[str], bad_row: bool, status: int, words: str
) -> None:
    job = write_job(stages=STAGES + BAD_ROW * bad_row, parts=PARTS)
    done = here("screen", job, *(f"--fail-on={condition}" for condition in conditions), status=status)
    assert words in done.err
    assert len(list((job.parent / "runs").glob("*/run.json"))) == 1


def test_check_fails_on_rejected_rows_only(here: CommandLineHere, write_job: JobWriter) -> None:
    assert here("check", write_job(stages=STAGES), "--fail-on", "rejected").err == ""
    job = write_job(stages=STAGES + BAD_ROW)
    assert "1 rejected" in here("check", job, "--fail-on", "rejected", status=3).err
    assert not (job.parent / "runs").exists()


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["scren"], "there is no command 'scren'; did you mean 'screen'?"),
        (["zzz"], "there is no command 'zzz'; the commands are check, "),
        (["form", "invertign"], "there is no topology 'invertign'; did you mean 'inverting'?"),
        (["form", "zzz"], "there is no topology 'zzz'; `gainassay topologies` lists"),
        (["form", "none.toml"], "none.toml: there is no such file"),
        (["check", "none.toml"], "none.toml: there is no such file"),
        (["check", "."], "cannot be read"),
        (["check"], "Missing argument 'JOB'"),
        (["check", "a", "b"], "unexpected extra argument"),
        (["screen", "a", "--workers", "0"], "Invalid value for '--workers'"),
        (["screen", "a", "--fail-on", "rain"], "'rain' is not one of"),
        (["--colour"], "No such option"),
        ([], "Usage: gainassay"),
    ],
)
def test_a_command_that_cannot_be_carried_out(here: CommandLineHere, arguments: Sequence[str], words: str) -> None:
    assert words in here(*arguments, status=2).err


@pytest.mark.parametrize(
    ("names", "words"),
    [
        (["eazy", "limits"], "there is no usable stage 'eazy'; did you mean 'easy'?"),
        (["easy", "limit"], "there is no usable part 'limit'; did you mean 'limits'?"),
        (["zzz", "limits"], "there is no usable stage 'zzz'; `gainassay check` says what is in the table"),
        (["bad", "limits"], "row 4: stage 'bad' was rejected: r1 'x' is not a number"),
    ],
)
def test_explain_names_the_nearest(
    here: CommandLineHere, write_job: JobWriter, names: Sequence[str], words: str
) -> None:
    job = write_job(stages=STAGES + BAD_ROW, parts=PARTS)
    assert words in here("explain", job, *names, status=2).err


def test_explain_says_why_a_stage_was_rejected(here: CommandLineHere, write_job: JobWriter) -> None:
    job = write_job(stages=STAGES + "easy,follower,,,1\n", parts=PARTS)
    assert (
        "stage 'easy' was rejected: stage 'easy' stands more than once"
        in here("explain", job, "easy", "limits", status=2).err
    )


@pytest.mark.parametrize("command", ["check", "screen", "need", "runs", "explain", "topologies", "form"])
def test_json_is_json(here: CommandLineHere, write_job: JobWriter, command: str) -> None:
    job = write_job(stages=STAGES + BAD_ROW, parts=PARTS)
    here("screen", job)
    arguments: dict[str, list[str | Path]] = {
        "explain": [job, "easy", "typical"],
        "topologies": [],
        "form": ["inverting"],
    }
    assert whole(here(command, *arguments.get(command, [job]), "--json").out)


def test_json_has_null_where_there_is_no_finite_number(capsys: pytest.CaptureFixture[str]) -> None:
    shared.data({"a": math.nan, "b": [math.inf, 1.5], "c": (-math.inf, {"d": math.nan}), "e": "nan"})
    assert whole(capsys.readouterr().out) == {"a": None, "b": [None, 1.5], "c": [None, {"d": None}], "e": "nan"}


def test_the_sum_of_an_explanation_is_its_error(here: CommandLineHere, write_job: JobWriter) -> None:
    found = whole(here("explain", write_job(stages=STAGES, parts=PARTS), "hard", "limits", "--json").out)
    for kind in ("nominal", "worst"):
        terms = [term[f"{kind}_ppm"] for term in found["terms"]]
        assert sum(terms) == pytest.approx(found[f"error_{kind}_ppm"], rel=0, abs=1e-12 * sum(map(abs, terms)))


def test_runs_are_listed_oldest_first(here: CommandLineHere, write_job: JobWriter) -> None:
    job = write_job()
    assert here("runs", job).out.startswith("There are no runs in ")
    ran = [whole(here("screen", job, "--json").out)["run"] for _ in range(2)]
    assert [run["run"] for run in whole(here("runs", job, "--json").out)] == sorted(ran)
    assert here("runs", job).out.splitlines()[1].startswith(sorted(ran)[0])


def test_an_internal_fault_is_told_without_a_traceback(
    here: CommandLineHere, write_job: JobWriter, monkeypatch: pytest.MonkeyPatch
) -> None:
    def fail(_: object) -> NoReturn:
        raise RuntimeError("something")

    monkeypatch.setattr(service, "prepare", fail)
    err = here("check", write_job(), status=1).err
    assert "internal fault: RuntimeError: something" in err
    assert "Traceback" not in err


def test_an_interrupt_is_told_without_a_traceback(
    here: CommandLineHere, write_job: JobWriter, monkeypatch: pytest.MonkeyPatch
) -> None:
    def interrupt(_: object) -> NoReturn:
        raise KeyboardInterrupt

    monkeypatch.setattr(service, "prepare", interrupt)
    assert "interrupted" in here("check", write_job(), status=130).err


@pytest.mark.parametrize("command", ["topologies", "screen"])
def test_a_reader_that_has_gone_is_no_fault(gainassay: CommandLine, write_job: JobWriter, command: str) -> None:
    reader, writer = os.pipe()
    os.close(reader)
    with gainassay.start(command, *([write_job()] if command == "screen" else []), stdout=writer) as process:
        os.close(writer)
        _, err = process.communicate(timeout=30)
    assert (process.returncode, err) == (0, b"")


@pytest.mark.parametrize("output", [">&-", ">/dev/full"])
def test_an_output_that_cannot_be_written_is_not_our_fault(gainassay: CommandLine, output: str) -> None:
    words = [*gainassay.program, "topologies"]
    done = subprocess.run(["bash", "-c", f'"$@" {output}', "bash", *words], capture_output=True, text=True, check=False)
    assert "internal fault" not in done.stderr
    assert "Traceback" not in done.stderr
    assert done.returncode != 1
