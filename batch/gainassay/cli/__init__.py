"""The command line: a table of commands, each imported only when it is called, so that `--help` answers at once."""

from __future__ import annotations

import importlib
import logging
import os
import signal
import sys
from typing import NoReturn

import click
from click.shell_completion import CompletionItem

from gainassay import __version__
from gainassay.errors import GainassayError

COMMANDS = {
    "check": "Read a job's tables and say what is in them.",
    "columns": "Say what the columns of tables mean, with units and limits.",
    "explain": "Show all that decides one stage with one part.",
    "form": "Show the gain of a topology as a formula.",
    "map": "Propose what the columns of a table of yours may be.",
    "need": "Say what each stage of a job asks of a part.",
    "new": "Write a new job, with tables and a small example.",
    "runs": "List the runs of a job.",
    "sample": "Write a sample set, ready to screen, into a new folder.",
    "screen": "Screen all stages of a job against all its parts.",
    "topologies": "List the topologies.",
}
"""Every command with its one line of help; the command `name` is the function `name` of the module `name`."""

INTERNAL_FAULT, UNUSABLE, INTERRUPTED = 1, 2, 130


class _ReaderGoneError(Exception):
    """Whoever read our output has gone, as `| head` does; click itself would end with status 1."""


class _Commands(click.Group):
    def invoke(self, ctx: click.Context) -> object:
        try:
            return super().invoke(ctx)
        except (BrokenPipeError, _ReaderGoneError):
            raise _ReaderGoneError from None

    def shell_complete(self, ctx: click.Context, incomplete: str) -> list[CompletionItem]:
        commands = [CompletionItem(name, help=line) for name, line in COMMANDS.items() if name.startswith(incomplete)]
        return commands or super().shell_complete(ctx, incomplete)

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        module = importlib.import_module(f"gainassay.cli.{cmd_name}")
        command: click.Command = getattr(module, cmd_name)
        return command

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        try:
            return super().resolve_command(ctx, args)
        except click.UsageError as error:
            from gainassay.contracts.documents import nearest

            hint = nearest(args[0], COMMANDS) or f"; the commands are {', '.join(COMMANDS)}"
            raise click.UsageError(f"there is no command {args[0]!r}{hint}", ctx) from error

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))


@click.group(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, package_name="gainassay", message="%(prog)s %(version)s")
def gainassay() -> None:
    """Which op-amps keep which gain stages inside their required accuracy, by how much, and what decides it.

    Exit status: 0 done; 1 an internal fault; 2 unusable command or input, nothing written; 3 done, but a
    condition asked for with --fail-on came true; 130 interrupted.
    """


def main() -> NoReturn:
    """Run the command line and exit with its status; no traceback reaches the user."""
    for stream in (sys.stdout, sys.stderr):
        # A name that the terminal's encoding lacks is shown escaped and does not end the run.
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="backslashreplace")
    logging.basicConfig(format="warning: %(message)s", level=logging.WARNING)
    # A scheduler's "stop" is an interruption like a person's: what was begun is cleared away.
    signal.signal(signal.SIGTERM, signal.default_int_handler)
    try:
        gainassay.main(standalone_mode=False, prog_name="gainassay")
        if sys.stdout is not None:
            sys.stdout.flush()
    except click.ClickException as error:
        from gainassay.cli.shared import printable

        command = error.ctx.command_path if isinstance(error, click.UsageError) and error.ctx else "gainassay"
        click.echo(printable(f"gainassay: {error.format_message()}\nTry '{command} --help'."), err=True)
        sys.exit(UNUSABLE)
    except GainassayError as error:
        from gainassay.cli.shared import printable

        click.echo(printable(f"gainassay: {error}"), err=True)
        sys.exit(error.exit_status)
    except (click.Abort, KeyboardInterrupt):
        click.echo("gainassay: interrupted; nothing was kept", err=True)
        # Threads end the blocks they are at; a second ^C meanwhile would only print where it hit.
        signal.signal(signal.SIGINT, signal.SIG_IGN)
        sys.exit(INTERRUPTED)
    except (BrokenPipeError, _ReaderGoneError):
        # The reader of our output has gone, as `| head` does. Nothing more can be said to it.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        sys.exit(0)
    except Exception as error:
        if os.environ.get("GAINASSAY_DEBUG"):
            raise
        kind = type(error).__name__
        click.echo(
            f"gainassay: internal fault: {kind}: {error}\n"
            "This is our mistake, not yours. Please report it; with GAINASSAY_DEBUG=1 set, the command shows where.",
            err=True,
        )
        sys.exit(INTERNAL_FAULT)
    sys.exit(0)
