"""The house: one direction of imports, sympy in one room, documents that follow their schemas."""

from __future__ import annotations

import ast
import json
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
PACKAGE = ROOT / "batch" / "gainassay"

FLOORS = {
    "errors": 1,
    "resources": 1,
    "cautions": 1,
    "contracts": 2,
    "forms": 3,
    "job": 3,
    "tables": 4,
    "screen": 5,
    "runs": 6,
    "service": 7,
    "explanation": 7,
    "specification": 7,
    "shortened": 8,
    "report": 9,
    "cli": 10,
    "__main__": 11,
}
"""Rooms by floor: each imports only from its own room and from lower floors."""

MODULES = sorted(PACKAGE.rglob("*.py"))


def imported(path: Path) -> list[str]:
    """Full names of the modules that a file imports, wherever in the file."""
    found = []
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            found += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom) and node.module:
            found += [node.module, *(f"{node.module}.{alias.name}" for alias in node.names)]
    return found


def room(module: str) -> str | None:
    """The room of a module of ours: its first name below the package."""
    names = module.split(".")
    return names[1] if names[0] == "gainassay" and len(names) > 1 and names[1] in FLOORS else None


@pytest.mark.parametrize("path", MODULES, ids=lambda path: path.relative_to(PACKAGE).as_posix())
def test_imports_run_downwards(path: Path) -> None:
    own = path.relative_to(PACKAGE).parts[0].removesuffix(".py")
    if own == "__init__":
        return
    for module in imported(path):
        other = room(module)
        if other and other != own:
            assert FLOORS[other] < FLOORS[own], f"{own} (floor {FLOORS[own]}) imports {module}"


@pytest.mark.parametrize("path", MODULES, ids=lambda path: path.relative_to(PACKAGE).as_posix())
def test_only_forms_know_sympy(path: Path) -> None:
    if "forms" not in path.relative_to(PACKAGE).parts:
        assert not any(module.split(".")[0] == "sympy" for module in imported(path))


def test_rooms_of_the_house_are_all_on_a_floor() -> None:
    rooms = {path.name.removesuffix(".py") for path in PACKAGE.iterdir() if path.suffix == ".py" or path.is_dir()}
    assert rooms - {"__init__", "__pycache__", "py.typed", "topologies"} == set(FLOORS)


@pytest.mark.parametrize("path", MODULES, ids=lambda path: path.relative_to(PACKAGE).as_posix())
def test_text_is_never_run_as_code(path: Path) -> None:
    tree = ast.parse(path.read_text(encoding="utf-8"))
    called = {node.func.id for node in ast.walk(tree) if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)}
    assert not called & {"eval", "exec", "compile", "sympify", "parse_expr"}


def test_top_level_is_as_agreed() -> None:
    agreed = {
        "README.md", "DEVELOPERS.md", "CHANGELOG.md", "LICENSE", "pyproject.toml",
        "batch", "schemas", "tests", "sample_sets",
    }  # fmt: skip
    there = {path.name for path in ROOT.iterdir() if not path.name.startswith(".")}
    if (ROOT / ".git").exists():
        assert there - {"build", "dist"} == agreed


@pytest.mark.parametrize("path", sorted((ROOT / "schemas").glob("*.json")), ids=lambda path: path.name)
def test_schema_files_state_what_they_must(path: Path) -> None:
    document = json.loads(path.read_text(encoding="utf-8"))
    assert document["$schema"].startswith("https://")
    assert document["description"]
    for field in document.get("fields", []):
        assert field["description"].strip(), field["name"]
        if field["type"] == "number":
            assert field["unit"], field["name"]


def test_names_of_columns_are_said_once() -> None:
    """The job's stand-ins, the departures and the parts table agree on the names of quantities."""
    from gainassay.contracts import documents, tables
    from gainassay.forms.departures import FIGURES

    quantities = [figure.quantity for figure in FIGURES]
    assert list(documents.schema("job")["properties"]["assume"]["properties"]) == quantities
    columns = {column.name for column in tables.columns("parts")}
    for departure in FIGURES:
        assert {departure.limit_column, f"{departure.quantity}_typ"} <= columns
