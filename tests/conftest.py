"""What tests share: the command line, in a process of its own or in this one, and small jobs to run it on."""

from __future__ import annotations

import csv
import io
import signal
import subprocess
import sys
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import pytest

from gainassay import cli
from gainassay.forms.library import library
from gainassay.forms.topology import Topology

STAGE = {"stage": "level", "topology": "inverting", "r1": "1k", "r2": "10k", "accuracy_pct": "1"}
"""A stage that `PART` keeps."""

PART = {"part": "amp-1", "a_ol_min": "100000", "r_id_min": "1M", "r_o_max": "100"}
"""A part whose data sheet limits everything."""

TABLES = '[stages]\nfrom = "stages.csv"\n\n[parts]\nfrom = "parts.csv"\n'

Rows = str | bytes | Sequence[Mapping[str, str]]


@dataclass(frozen=True)
class Ended:
    """A command that has ended."""

    status: int
    out: str
    err: str


@pytest.fixture(scope="session", autouse=True)
def cache(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """Keeps every test, and every process that one starts, away from the user's cache."""
    folder = tmp_path_factory.mktemp("cache")
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("GAINASSAY_CACHE", str(folder))
        yield folder


@pytest.fixture(scope="session")
def built_in() -> dict[str, Topology]:
    """The built-in topologies, by name."""
    return library()


class JobWriter:
    """Writes small jobs: a table as rows, as text or as bytes."""

    def __init__(self, home: Path) -> None:
        self.home = home

    def __call__(
        self,
        more: str | bytes = "",
        *,
        stages: Rows = (STAGE,),
        parts: Rows = (PART,),
        tables: str = TABLES,
        folder: str = "job",
    ) -> Path:
        """The path of a job file whose tables lie beside it; `more` follows the lines that name the tables."""
        home = self.home / folder
        home.mkdir(parents=True, exist_ok=True)
        (home / "stages.csv").write_bytes(_content(stages))
        (home / "parts.csv").write_bytes(_content(parts))
        path = home / "job.toml"
        path.write_bytes(tables.encode() + (more.encode() if isinstance(more, str) else more))
        return path


def _content(rows: Rows) -> bytes:
    if isinstance(rows, bytes):
        return rows
    if isinstance(rows, str):
        return rows.encode()
    file = io.StringIO(newline="")
    writer = csv.DictWriter(file, list(dict.fromkeys(name for row in rows for name in row)), lineterminator="\n")
    writer.writeheader()
    writer.writerows(rows)
    return file.getvalue().encode()


@pytest.fixture
def write_job(tmp_path: Path) -> JobWriter:
    """Writes small jobs into the test's own folder."""
    return JobWriter(tmp_path)


class CommandLine:
    """The command `gainassay` in a process of its own."""

    program = (sys.executable, "-m", "gainassay")

    def __call__(self, *arguments: str | Path, status: int = 0) -> Ended:
        """Run it, and see that it ends with the status and without a traceback."""
        done = subprocess.run(
            [*self.program, *map(str, arguments)],
            capture_output=True,
            encoding="utf-8",
            errors="replace",
            check=False,
            timeout=60,
        )
        assert "Traceback" not in done.stderr
        assert done.returncode == status, done.stderr
        return Ended(done.returncode, done.stdout, done.stderr)

    def start(self, *arguments: str | Path, stdout: int = subprocess.PIPE) -> subprocess.Popen[bytes]:
        """Start it, to be watched or disturbed.

        It listens to interrupts, even where the tests themselves run in a shell's background and do not.
        """
        return subprocess.Popen(
            [*self.program, *map(str, arguments)],
            stdout=stdout,
            stderr=subprocess.PIPE,
            preexec_fn=lambda: signal.signal(signal.SIGINT, signal.SIG_DFL),
        )


@pytest.fixture(scope="session")
def gainassay() -> CommandLine:
    """The command line as users have it, a process for each call."""
    return CommandLine()


class CommandLineHere:
    """`main()` of the command line in this process: faster, and a warning of any library is a failure."""

    def __init__(self, patch: pytest.MonkeyPatch, streams: pytest.CaptureFixture[str]) -> None:
        self.patch = patch
        self.streams = streams

    def __call__(self, *arguments: str | Path, status: int = 0) -> Ended:
        """Run it, and see that it ends with the status; whatever else it raised would be a traceback."""
        self.patch.setattr(sys, "argv", ["gainassay", *map(str, arguments)])
        self.streams.readouterr()
        with pytest.raises(SystemExit) as ended:
            cli.main()
        out, err = self.streams.readouterr()
        assert ended.value.code == status, err
        return Ended(status, out, err)


@pytest.fixture
def here(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> CommandLineHere:
    """The command line in this process."""
    return CommandLineHere(monkeypatch, capsys)
