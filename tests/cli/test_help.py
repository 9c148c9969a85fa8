"""Help: every command has it, and it answers without the heavy libraries."""

from __future__ import annotations

import subprocess
import sys
from typing import TYPE_CHECKING

import click
import pytest

from gainassay.cli import COMMANDS, gainassay

if TYPE_CHECKING:
    from conftest import CommandLineHere

MODULES = """
import sys
from gainassay import cli
sys.argv = ["gainassay", *sys.argv[1:]]
try:
    cli.main()
except SystemExit as ended:
    print(*{"sympy", "pandas", "dask", "pyarrow", "numpy"} & set(sys.modules), file=sys.stderr)
    sys.exit(ended.code)
"""


def heavy(*arguments: str) -> set[str]:
    """The heavy libraries that a command line has imported when it ends, with status 0."""
    done = subprocess.run([sys.executable, "-c", MODULES, *arguments], check=True, capture_output=True, text=True)
    assert "Usage: gainassay" in done.stdout
    return set(done.stderr.split())


def test_help_imports_nothing_heavy() -> None:
    assert heavy("--help") == set()


@pytest.mark.parametrize("command", COMMANDS)
def test_help_of_a_command_imports_nothing_that_is_slow(command: str) -> None:
    assert heavy(command, "--help") & {"sympy", "pandas", "dask"} == set()


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_has_help(here: CommandLineHere, command: str) -> None:
    out = here(command, "--help").out
    assert out.startswith(f"Usage: gainassay {command} ")
    assert here(command, "-h").out == out


def command_of(name: str) -> click.Command:
    """A command by its name."""
    found = gainassay.get_command(click.Context(gainassay), name)
    assert found is not None
    return found


@pytest.mark.parametrize("name", COMMANDS)
def test_the_list_of_commands_says_what_the_command_says(name: str) -> None:
    command, line = command_of(name), COMMANDS[name]
    assert command.name == name
    assert command.help
    assert line.split()[0] == command.help.split()[0]
    assert line.endswith(".")
    assert len(line) < 66


def test_the_list_of_commands_is_complete(here: CommandLineHere) -> None:
    out = here("--help").out
    assert all(f"  {name} " in out and line in out for name, line in COMMANDS.items())
    assert list(COMMANDS) == sorted(COMMANDS)


@pytest.mark.parametrize("name", COMMANDS)
def test_help_says_what_every_option_and_argument_is(name: str) -> None:
    command = command_of(name)
    for parameter in command.params:
        shown = parameter.make_metavar(click.Context(command))
        assert getattr(parameter, "help", None) or shown in (command.help or ""), shown


def test_version(here: CommandLineHere) -> None:
    assert here("--version").out.startswith("gainassay 0.")
