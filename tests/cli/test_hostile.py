"""Broken and hostile jobs: exit status 2 or a rejected row, never a traceback, and nothing raw on the terminal."""

from __future__ import annotations

import os
import pty
import subprocess
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import pytest

if TYPE_CHECKING:
    from conftest import CommandLine, CommandLineHere, JobWriter

GOOD_STAGES = "stage,topology,r1,r2,accuracy_pct\ns,inverting,1k,10k,1\n"
GOOD_PARTS = "part,a_ol_min,r_id_min,r_o_max\np,100000,1M,100\n"


def tables(stages: str = "stages.csv", parts: str = "parts.csv") -> str:
    """The lines that name the tables."""
    return f'[stages]\nfrom = "{stages}"\n[parts]\nfrom = "{parts}"\n'


JOBS: dict[str, dict[str, str | bytes]] = {
    "empty job": {"tables": ""},
    "no TOML": {"tables": "stages.csv parts.csv"},
    "not UTF-8": {"more": b"# \xe9"},
    "unknown key": {"more": "[result]\n"},
    "keys nested 5000 deep": {"more": ".".join("a" * 5000) + " = 1\n"},
    "lists nested 5000 deep": {"tables": "x = " + "[" * 5000 + "]" * 5000},
    "an integer of 401 digits": {"more": f"[assume]\nr_o = {{ value = 1{'0' * 400} }}\n"},
    "an integer of 5001 digits": {"more": f"[assume]\nr_o = {{ value = 1{'0' * 5000} }}\n"},
    "nan": {"more": "[assume]\nr_o = { value = nan }\n"},
    "no such table": {"tables": tables("none.csv")},
    "NUL in a path": {"tables": tables("\\u0000.csv")},
    "a folder for a table": {"tables": tables(".")},
    "no such topology file": {"tables": 'topologies = ["none.toml"]\n' + tables()},
    "a table for a topology": {"tables": 'topologies = ["stages.csv"]\n' + tables()},
    "a job for a topology": {"tables": 'topologies = ["job.toml"]\n' + tables()},
    "a file for the results": {"more": '[results]\nfolder = "parts.csv"\n'},
    "NUL in the results' path": {"more": '[results]\nfolder = "\\u0000"\n'},
    "empty stages": {"stages": ""},
    "header only": {"stages": "stage,topology,accuracy_pct\n"},
    "header without newline": {"stages": "stage,topology,accuracy_pct"},
    "stages of zero bytes": {"stages": b"\0" * 1000},
    "random bytes": {"stages": bytes(range(256)) * 10},
    "Latin-1 in a ragged row": {"stages": GOOD_STAGES.encode() * 1 + b"s,inverting,1k,10k,1\n" * 20_000 + b"\xe9\n"},
    "UTF-16": {"parts": GOOD_PARTS.encode("utf-16")},
    "quote never closed": {"parts": GOOD_PARTS.replace("part,", 'part,"')},
    "repeated column": {"parts": GOOD_PARTS.replace("r_o_max", "r_id_min")},
    "semicolons": {"parts": GOOD_PARTS.replace(",", ";")},
    "no usable part": {"parts": GOOD_PARTS.replace("100000", "1e400")},
    "no usable stage": {"stages": GOOD_STAGES.replace("1k", "")},
    "Parquet by name only": {"tables": tables(parts="stages.parquet"), "more": ""},
}


@pytest.mark.parametrize("name", JOBS)
def test_a_broken_job_is_refused(here: CommandLineHere, write_job: JobWriter, name: str) -> None:
    job = write_job(**({"stages": GOOD_STAGES, "parts": GOOD_PARTS} | JOBS[name]))  # type: ignore[arg-type]
    before = sorted(job.parent.rglob("*"))
    done = here("screen", job, status=2)
    assert done.out == ""
    assert done.err.startswith("gainassay: ")
    assert sorted(job.parent.rglob("*")) == before


@pytest.mark.parametrize("name", ["unknown key", "NUL in a path", "Latin-1 in a ragged row", "no usable part"])
def test_a_broken_job_is_refused_in_a_process_of_its_own(
    gainassay: CommandLine, write_job: JobWriter, name: str
) -> None:
    job = write_job(**({"stages": GOOD_STAGES, "parts": GOOD_PARTS} | JOBS[name]))  # type: ignore[arg-type]
    assert gainassay("screen", job, status=2).out == ""


@pytest.mark.parametrize("command", ["check", "screen", "runs"])
def test_a_folder_whose_name_is_no_utf_8_is_refused(here: CommandLineHere, write_job: JobWriter, command: str) -> None:
    # A manifest is UTF-8 and could not name its own inputs.
    job = write_job(folder=os.fsdecode(b"caf\xe9"))
    assert "UTF-8" in here(command, job, status=2).err
    assert not (job.parent / "runs").exists()


def test_a_manifest_that_somebody_spoilt_does_not_hide_the_other_runs(
    here: CommandLineHere, write_job: JobWriter
) -> None:
    job = write_job()
    here("screen", job)
    spoilt = job.parent / "runs" / "20310203T040506Z-00000000"
    spoilt.mkdir()
    (spoilt / "run.json").write_text("{}")
    done = here("runs", job)
    assert len(done.out.splitlines()) == 2
    assert f"{spoilt}: holds no run.json that can be read, so it is no run" in done.err


def terminal(gainassay: CommandLine, *arguments: str | Path) -> str:
    """What a terminal receives of a command."""
    reader, writer = pty.openpty()
    with subprocess.Popen([*gainassay.program, *map(str, arguments)], stdout=writer, stderr=writer, stdin=writer):
        os.close(writer)
        received = b""
        while chunk := _read(reader):
            received += chunk
    os.close(reader)
    return received.decode("utf-8", errors="surrogateescape")


def _read(reader: int) -> bytes:
    try:
        return os.read(reader, 65_536)
    except OSError:  # the other end is closed
        return b""


ESCAPES = ("\x1b[31m", "\x1b]0;title\x07", "\x9b31m")


@pytest.mark.parametrize(
    ("command", "tail"), [("check", []), ("explain", ["s\x1b[31m", "p"]), ("explain", ["s", "p\x1b]0;title\x07"])]
)
def test_a_control_sequence_in_a_table_never_reaches_the_terminal(
    gainassay: CommandLine, write_job: JobWriter, command: str, tail: Sequence[str]
) -> None:
    bad = [
        f"bad{e}{kind},{topology},{value},10k,1,\n"
        for kind, (topology, value) in enumerate(
            [("inverting", "1k"), ("inverting", "x\x1b[31m"), ("inv\x1b[31merting", "1k")]
        )
        for e in ("", *ESCAPES)
    ]
    header = "stage,topology,r1,r2,accuracy_pct," + "|".join(ESCAPES)
    job = write_job(stages=f"{header}\ns,inverting,1k,10k,1,\n{''.join(bad)}short\x1b[31m\n", parts=GOOD_PARTS)
    shown = terminal(gainassay, command, job, *tail)
    assert "short" in shown or command == "explain"
    for escape in ESCAPES:
        assert escape not in shown


@pytest.mark.parametrize("escape", ESCAPES)
def test_a_control_sequence_in_a_path_never_reaches_the_terminal(
    gainassay: CommandLine, write_job: JobWriter, escape: str
) -> None:
    written = "".join(f"\\u{ord(character):04x}" for character in escape)
    job = write_job(tables=tables(f"none{written}.csv"))
    assert escape not in terminal(gainassay, "check", job)
