"""The program itself: which commands there are, and what becomes of errors at this edge."""

from __future__ import annotations

import errno
import os
import sys
import traceback
from collections.abc import Mapping
from difflib import get_close_matches
from importlib import import_module
from typing import Any, NoReturn

import click

from trapd.cautions import CAUTIONS
from trapd.cli.answer import INTERRUPTED, tell_error
from trapd.errors import Bug, TrapdError

BROKEN_PIPE = 141
"""128 + SIGPIPE: what a shell reports of a program that this signal ends."""

COMMANDS: Mapping[str, Mapping[str, str]] = {
    "Start here": {"demo": "demo", "check": "check", "serve": "serve"},
    "Ask without a daemon": {"judge": "judge", "window": "window"},
    "The running daemon": {
        "status": "status",
        "on": "moves",
        "set": "moves",
        "go": "moves",
        "back": "moves",
        "ions": "ions",
        "empty": "moves",
        "scan": "scan",
        "stop": "off",
        "off": "off",
    },
    "Who comes first": {
        "claim": "claims",
        "release": "claims",
        "pause": "claims",
        "resume": "claims",
        "clear": "interlocks",
    },
    "What was done": {"record": "record", "verify": "verify"},
    "People": {"token": "token"},
}
"""Heading to command to the module of this package that defines it, under its own name with `_command` after it."""

MODULES = {name: module for group in COMMANDS.values() for name, module in group.items()}


class Program(click.Group):
    """Loads a command when it is asked for, and turns every error into words and an exit code."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(MODULES)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in MODULES:
            return None
        command = getattr(import_module(f"trapd.cli.{MODULES[cmd_name]}"), f"{cmd_name}_command")
        assert isinstance(command, click.Command)
        return command

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        if args[0] not in MODULES and not args[0].startswith("-"):
            near = get_close_matches(args[0], MODULES, n=1)
            hint = f'did you mean "{near[0]}"?' if near else "`trapd --help` lists them."
            raise click.UsageError(f'there is no command "{args[0]}"; {hint}', ctx)
        return super().resolve_command(ctx, args)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        widest = max(map(len, MODULES))
        for heading, names in COMMANDS.items():
            commands = {name: self.get_command(ctx, name) for name in names}
            rows = [(name.ljust(widest), one.get_short_help_str(120)) for name, one in commands.items() if one]
            with formatter.section(heading):
                formatter.write_dl(rows)

    def invoke(self, ctx: click.Context) -> Any:
        try:
            answer = super().invoke(ctx)
            sys.stdout.flush()
        except TrapdError as error:
            _fail(ctx, error)
        except BrokenPipeError:
            _leave_quietly(ctx)
        except KeyboardInterrupt:
            click.echo("\ninterrupted", err=True)
            ctx.exit(INTERRUPTED)
        except (click.ClickException, click.exceptions.Exit, click.Abort):
            raise
        except OSError as error:
            if error.errno != errno.ENOSPC:  # else our own output has nowhere to go
                _fail(ctx, _bug(error))
            click.echo(f"the output cannot be written: {error.strerror}", err=True)
            _leave_quietly(ctx, 1)
        except Exception as error:
            _fail(ctx, _bug(error))
        return answer


def _bug(error: Exception) -> Bug:
    bug = Bug(f"{type(error).__name__}: {error}")
    bug.__cause__ = error
    return bug


def _fail(ctx: click.Context, error: TrapdError) -> NoReturn:
    if isinstance(error, Bug):
        traceback.print_exception(error.__cause__ or error)
        click.echo("This is a bug of trapd. Please report it, with the lines above and what you did.", err=True)
    try:
        tell_error(error)
    except BrokenPipeError:
        _leave_quietly(ctx)
    ctx.exit(error.exit_code)


def _leave_quietly(ctx: click.Context, exit_code: int = BROKEN_PIPE) -> NoReturn:
    """Whoever read our output has stopped; Python must not complain about it once more when it flushes at the end."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
    ctx.exit(exit_code)


@click.group(
    cls=Program,
    epilog=CAUTIONS,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 120},
)
@click.version_option(package_name="trapd", prog_name="trapd", message="%(prog)s %(version)s")
def PROGRAM() -> None:  # noqa: N802
    """The background service that owns a radio-frequency ion trap's synthesizers and supplies.

    Offline commands take a trap file. Commands to a running daemon find it by themselves when there is one on this
    machine; else name it with --at or TRAPD_AT.
    """
