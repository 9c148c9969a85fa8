"""Run folders: written aside, committed whole by their manifest, never changed after.

A run is built in a folder whose name starts with a dot. `run.json` is written into it last, and then the
folder gets its name by one rename. A folder without `run.json` is no run.
"""

from __future__ import annotations

import fcntl
import hashlib
import json
import os
import re
import shutil
import time
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any

import pyarrow as pa

from gainassay.errors import InputError
from gainassay.runs.tables import sync, write_csv, write_parquet

MANIFEST = "run.json"
NEEDED = {"run", "started", "inputs", "pairs", "verdicts", "files"}
"""Keys without which a file of that name is no manifest."""

ASIDE = ".unfinished-"
WRITERS = {".csv": write_csv, ".parquet": write_parquet}
"""What writes a table, by the ending of the file's name."""

RUN = re.compile(r"[0-9]{8}T[0-9]{6}Z-[0-9a-f]{8}")
"""Name of a run's folder."""


@dataclass(frozen=True)
class File:
    """A file of a run, as the manifest lists it."""

    path: str
    size: int
    rows: int
    sha256: str


@dataclass(frozen=True)
class Unfinished:
    """A run that is being written.

    Attributes
    ----------
    folder : Path
        Where its files go until it is committed.
    home : Path
        The folder of all runs.
    """

    run: str
    folder: Path
    home: Path

    def commit(self, manifest: dict[str, Any]) -> Path:
        """Write the manifest, give the folder its name, and return it."""
        path = self.folder / MANIFEST
        path.write_text(json.dumps(manifest, indent=1, ensure_ascii=False, default=str) + "\n", encoding="utf-8")
        sync(path)
        sync(self.folder)
        committed = self.home / self.run
        self.folder.rename(committed)
        sync(self.home)
        return committed


@contextmanager
def begin(home: Path, started: datetime, fingerprint: str) -> Iterator[Unfinished]:
    """A new run in the folder `home`; if it ends without a commit, nothing of it stays.

    While it is written its folder is locked, so that others can tell it from one that was abandoned.

    Parameters
    ----------
    started : datetime
        When the run started, in UTC.
    fingerprint : str
        What the run's short hash is made of, with process and time.

    Raises
    ------
    InputError
        If the folder cannot be written.
    """
    # Of what no other run has, too: two runs of the same tables may start in the same second.
    own = f"{fingerprint} {os.getpid()} {time.time_ns()}"
    short = hashlib.sha256(own.encode()).hexdigest()[:8]
    run = f"{started:%Y%m%dT%H%M%SZ}-{short}"
    folder = home / f"{ASIDE}{run}"
    try:
        is_new_home = not home.exists()
        folder.mkdir(parents=True)
        lock = os.open(folder, os.O_RDONLY)
        fcntl.flock(lock, fcntl.LOCK_EX)
    except (OSError, ValueError) as error:
        raise _unwritable(home, error) from None
    try:
        yield Unfinished(run, folder, home)
    except OSError as error:
        raise _unwritable(home, error) from error
    finally:
        os.close(lock)
        shutil.rmtree(folder, ignore_errors=True)
        if is_new_home:
            with suppress(OSError):
                home.rmdir()


def _unwritable(home: Path, error: Exception) -> InputError:
    return InputError(f"{home}: results cannot be written there: {getattr(error, 'strerror', None) or error}")


def write(folder: Path, name: str, table: pa.Table) -> File:
    """Write a table into a run's folder, as Parquet or CSV by the ending of its name."""
    path = folder / name
    WRITERS[path.suffix](table, path)
    return file_of(folder, path, table.num_rows)


def file_of(folder: Path, path: Path, rows: int) -> File:
    """A written file, hashed."""
    with path.open("rb") as file:
        sha256 = hashlib.file_digest(file, "sha256").hexdigest()
    return File(path.relative_to(folder).as_posix(), path.stat().st_size, rows, sha256)


@dataclass(frozen=True)
class Listed:
    """What lies in a folder of runs.

    Attributes
    ----------
    runs : tuple[dict[str, Any], ...]
        Manifests of the committed runs, oldest first.
    in_progress, abandoned : tuple[str, ...]
        Folders of runs that are being written, and of runs whose process is gone.
    unreadable : tuple[str, ...]
        Folders named like runs, without a manifest that can be read.
    """

    runs: tuple[dict[str, Any], ...]
    in_progress: tuple[str, ...]
    abandoned: tuple[str, ...]
    unreadable: tuple[str, ...]


def listed(home: Path) -> Listed:
    """The runs in a folder; none if there is no such folder.

    Raises
    ------
    InputError
        If the folder cannot be read.
    """
    runs: list[dict[str, Any]] = []
    in_progress: list[str] = []
    abandoned: list[str] = []
    unreadable: list[str] = []
    try:
        folders = sorted(home.iterdir()) if home.is_dir() else []
    except OSError as error:
        raise InputError(f"{home}: cannot be read: {error.strerror or error}") from None
    for folder in folders:
        if folder.name.startswith(ASIDE):
            (in_progress if _is_locked(folder) else abandoned).append(folder.name)
        elif RUN.fullmatch(folder.name):
            manifest = _manifest(folder / MANIFEST)
            if manifest is None:
                unreadable.append(folder.name)
            else:
                runs.append(manifest)
    return Listed(tuple(runs), tuple(in_progress), tuple(abandoned), tuple(unreadable))


def _is_locked(folder: Path) -> bool:
    try:
        handle = os.open(folder, os.O_RDONLY)
    except OSError:
        return False
    try:
        fcntl.flock(handle, fcntl.LOCK_SH | fcntl.LOCK_NB)
    except OSError:
        return True
    finally:
        os.close(handle)
    return False


def _manifest(path: Path) -> dict[str, Any] | None:
    try:
        found = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError, RecursionError):
        return None
    return found if isinstance(found, dict) and found.keys() >= NEEDED else None
