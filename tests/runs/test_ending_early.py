"""A run that is killed or interrupted commits nothing, and readers are told what lies there."""

from __future__ import annotations

import json
import signal
import subprocess
import time
from pathlib import Path
from typing import TYPE_CHECKING

import pytest

if TYPE_CHECKING:
    from conftest import CommandLine

STAGES, PARTS = 1500, 6000


@pytest.fixture
def job(tmp_path: Path) -> Path:
    """A job that takes a few seconds."""
    stages = "".join(f"s{n},inverting,1k,{n + 1}k,1,0.1\n" for n in range(STAGES))
    parts = "".join(f"p{n},{1000 + n},1M,100\n" for n in range(PARTS))
    (tmp_path / "stages.csv").write_text(f"stage,topology,r1,r2,accuracy_pct,tol_pct\n{stages}")
    (tmp_path / "parts.csv").write_text(f"part,a_ol_min,r_id_min,r_o_max\n{parts}")
    (tmp_path / "job.toml").write_text('[stages]\nfrom = "stages.csv"\n[parts]\nfrom = "parts.csv"\n')
    return tmp_path / "job.toml"


def in_the_middle(job: Path, process: subprocess.Popen[bytes]) -> None:
    """Wait until the run writes its verdicts."""
    deadline = time.monotonic() + 30
    while not list(job.parent.glob("runs/.unfinished-*/verdicts")):
        assert process.poll() is None
        assert time.monotonic() < deadline
        time.sleep(0.02)


def test_a_killed_run_is_no_run(job: Path, gainassay: CommandLine) -> None:
    with gainassay.start("screen", job) as process:
        in_the_middle(job, process)
        process.kill()
    (left,) = (job.parent / "runs").iterdir()
    assert left.name.startswith(".unfinished-")
    assert not (left / "run.json").exists()
    listed = gainassay("runs", job)
    assert listed.out.startswith("There are no runs in ")
    assert f"{left}: a run that was abandoned; it may be deleted" in listed.err
    assert json.loads(gainassay("runs", job, "--json").out) == []


def test_a_run_in_progress_is_told_from_an_abandoned_one(job: Path, gainassay: CommandLine) -> None:
    with gainassay.start("screen", job) as process:
        in_the_middle(job, process)
        listed = gainassay("runs", job)
        process.send_signal(signal.SIGINT)
        process.communicate(timeout=30)
    assert "a run in progress" in listed.err


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_an_interrupted_run_leaves_nothing(job: Path, gainassay: CommandLine, number: signal.Signals) -> None:
    with gainassay.start("screen", job) as process:
        in_the_middle(job, process)
        process.send_signal(number)
        out, err = process.communicate(timeout=30)
    assert process.returncode == 130
    assert out == b""
    assert err.strip() == b"gainassay: interrupted; nothing was kept"
    assert not (job.parent / "runs").exists()
