"""``trapd serve``: the daemon."""

from __future__ import annotations

from pathlib import Path

import click

from trapd.cli.options import command, file_argument


@command("trapd serve trap.toml")
@file_argument
def serve_command(file: Path) -> None:
    """Run the daemon of one trap until SIGTERM or Ctrl-C. Every output stays as it is, at the start and at the end.

    It logs to standard error. With --json a failure to start is a document on standard output.
    """
    from trapd.daemon import serve

    click.get_current_context().exit(serve(file))
