"""``trapd serve``: the daemon."""

from __future__ import annotations

from pathlib import Path

import click

from trapd.cli.answer import examples, json_option, leave_with
from trapd.cli.offline import file_argument


@click.command("serve", short_help="Run the daemon of one trap.", epilog=examples("trapd serve trap.toml"))
@file_argument
@json_option
def serve_command(file: Path) -> None:
    """Run the daemon of one trap until SIGTERM or Ctrl-C. Every output stays as it is, at the start and at the end.

    It logs to standard error. With --json a failure to start is a document on standard output.
    """
    from trapd.daemon import serve

    leave_with(serve(file))
