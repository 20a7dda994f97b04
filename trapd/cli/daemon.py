"""How commands find the running daemon."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import click

from trapd.cli.answer import Function
from trapd.errors import BadRequest

if TYPE_CHECKING:
    from trapd.client import Client

_AT = "The daemon: its URL, its socket, or its trap file. Default: TRAPD_AT, else the only one on this machine."


def daemon_option(command: Function) -> Function:
    return click.option("--at", metavar="WHERE", help=_AT)(command)


def connect(at: str | None) -> Client:
    """Raises `DaemonUnreachable` with what was looked for. Over TCP the token is TRAPD_TOKEN."""
    from trapd.client import Client

    return Client(at)


def why_option(command: Function) -> Function:
    text = "The reason; it stands in the record."
    return click.option("--why", required=True, metavar="TEXT", help=text)(command)


def not_both(file: Path | None, at: str | None) -> None:
    """A file is asked instead of a daemon."""
    if file is not None and at is not None:
        raise BadRequest("--file asks a file and --at a daemon; leave out --at, or leave out --file")
