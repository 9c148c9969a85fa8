"""Where the files that ship with the package lie: in the wheel, or in the checkout of an editable install."""

from pathlib import Path

_PACKAGE = Path(__file__).resolve().parent
_CHECKOUT = _PACKAGE.parent.parent


def _shipped(folder: str) -> Path:
    packaged = _PACKAGE / folder
    return packaged if packaged.is_dir() else _CHECKOUT / folder


def schemas() -> Path:
    """Folder of the table and document schemas."""
    return _shipped("schemas")


def sample_sets() -> Path:
    """Folder of the sample sets."""
    return _shipped("sample_sets")


def topologies() -> Path:
    """Folder of the built-in topology files."""
    return _PACKAGE / "topologies"
