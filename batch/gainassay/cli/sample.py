"""`gainassay sample`."""

from __future__ import annotations

import shutil
from pathlib import Path

import click

from gainassay import resources
from gainassay.cli import shared
from gainassay.errors import InputError

SAMPLE = "river_gauging"


@click.command()
@click.argument("folder", type=click.Path(path_type=Path))
def sample(folder: Path) -> None:
    """Write the sample set of an invented maker of river gauging stations into FOLDER, which must not exist."""
    try:
        shutil.copytree(
            resources.sample_sets() / SAMPLE,
            folder,
            ignore=shutil.ignore_patterns("runs", "__pycache__", "generate.py"),
        )
    except FileExistsError:
        raise InputError(f"{folder}: exists already; name a new folder") from None
    except (OSError, shutil.Error) as error:
        raise InputError(f"{folder}: cannot be written: {error}") from None
    shared.lines([f"Written to {folder}. Next: gainassay screen {folder / 'job.toml'}"])
