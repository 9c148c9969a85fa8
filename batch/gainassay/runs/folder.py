"""Run folders: written aside, committed whole by their manifest, never changed after.

A run is built in a folder whose name starts with a dot. `run.json` is written into it last, and then the
folder gets its name by one rename. A folder without `run.json` is no run.
"""

from __future__ import annotations

import hashlib
import json
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from gainassay.errors import InputError
from gainassay.runs.tables import sync

MANIFEST = "run.json"
NEEDED = {"run", "started", "inputs", "pairs", "verdicts", "files"}
"""Keys without which a file of that name is no manifest."""

ASIDE = ".unfinished-"


@dataclass(frozen=True)
class File:
    """A file of a run, as the manifest lists it."""

    path: str
    size: int
    rows: int
    sha256: str


@dataclass
class Unfinished:
    """A run that is being written.

    Attributes
    ----------
    folder : Path
        Where its files go until it is committed.
    """

    run: str
    started: datetime
    folder: Path
    home: Path
    files: list[File] = field(default_factory=list)

    def commit(self, manifest: dict[str, Any]) -> Path:
        """Write the manifest, give the folder its name, and return it."""
        listed = [file.__dict__ for file in sorted(self.files, key=lambda file: file.path)]
        path = self.folder / MANIFEST
        text = json.dumps({"run": self.run, **manifest, "files": listed}, indent=1, ensure_ascii=False, default=str)
        path.write_text(text + "\n", encoding="utf-8")
        sync(path)
        sync(self.folder)
        committed = self.home / self.run
        self.folder.rename(committed)
        sync(self.home)
        return committed


@contextmanager
def begin(home: Path, fingerprint: str) -> Iterator[Unfinished]:
    """A new run in the folder `home`; if it ends without a commit, nothing of it stays.

    Parameters
    ----------
    fingerprint : str
        What the run's short hash is made of, with the time.

    Raises
    ------
    InputError
        If the folder cannot be written.
    """
    started = datetime.now(UTC)
    short = hashlib.sha256(f"{fingerprint} {started.isoformat()}".encode()).hexdigest()[:8]
    run = f"{started:%Y%m%dT%H%M%SZ}-{short}"
    folder = home / f"{ASIDE}{run}"
    try:
        folder.mkdir(parents=True)
    except (OSError, ValueError) as error:
        raise InputError(
            f"{home}: results cannot be written there: {getattr(error, 'strerror', None) or error}"
        ) from None
    try:
        yield Unfinished(run, started, folder, home)
    except OSError as error:
        raise InputError(f"{home}: results cannot be written there: {error.strerror or error}") from error
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def file_of(folder: Path, path: Path, rows: int) -> File:
    """A written file, hashed."""
    with path.open("rb") as file:
        sha256 = hashlib.file_digest(file, "sha256").hexdigest()
    return File(path.relative_to(folder).as_posix(), path.stat().st_size, rows, sha256)


@dataclass(frozen=True)
class Listed:
    """What lies in a folder of runs: committed runs, oldest first, and what no run came of."""

    runs: tuple[dict[str, Any], ...]
    unfinished: tuple[str, ...]
    unreadable: tuple[str, ...]


def listed(home: Path) -> Listed:
    """The runs in a folder; none if there is no such folder."""
    runs, unfinished, unreadable = [], [], []
    for folder in sorted(home.iterdir()) if home.is_dir() else ():
        if folder.name.startswith(ASIDE):
            unfinished.append(folder.name)
        elif folder.is_dir():
            try:
                manifest = json.loads((folder / MANIFEST).read_text(encoding="utf-8"))
            except (OSError, ValueError, RecursionError):
                manifest = None
            if isinstance(manifest, dict) and manifest.keys() >= NEEDED:
                runs.append(manifest)
            else:
                unreadable.append(folder.name)
    return Listed(tuple(runs), tuple(unfinished), tuple(unreadable))
