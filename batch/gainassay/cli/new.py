"""`gainassay new`."""

from __future__ import annotations

from pathlib import Path

import click

from gainassay.cli import shared
from gainassay.errors import InputError
from gainassay.report import scaffold


@click.command()
@click.argument("folder", type=click.Path(path_type=Path))
def new(folder: Path) -> None:
    """Write a new job, with tables and a small example, into FOLDER, which must not exist.

    The job states every key with its meaning. It runs at once.
    """
    try:
        folder.mkdir(parents=True)
        for name, text in scaffold.files().items():
            (folder / name).write_text(text, encoding="utf-8")
    except FileExistsError:
        raise InputError(f"{folder}: exists already; name a new folder") from None
    except (OSError, ValueError) as error:
        raise InputError(f"{folder}: cannot be written: {getattr(error, 'strerror', None) or error}") from None
    shared.lines(
        [
            f"Written to {folder}. Next: gainassay screen {folder / 'job.toml'}",
            f"Put your own rows into stages.csv and parts.csv; {folder / 'parts_empty.csv'} has only the header.",
        ]
    )
