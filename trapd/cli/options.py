"""Options and arguments that several commands have."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path

import click

from trapd.cli.answer import note_json

json_option = click.option(
    "--json",
    is_flag=True,
    is_eager=True,
    expose_value=False,
    callback=note_json,
    help="One JSON document on standard output; SI units.",
)
at_option = click.option(
    "--at",
    metavar="WHERE",
    help="The daemon: its URL, its socket, or its trap file. Default: TRAPD_AT, else the only one on this machine.",
)
why_option = click.option("--why", required=True, metavar="TEXT", help="The reason; it stands in the record.")
hasty_why_option = click.option("--why", default="", metavar="TEXT", help="A reason, if there is time for one.")
interrupt_option = click.option(
    "--interrupt", is_flag=True, help="Stop what runs for somebody else, and go over somebody else's claim."
)
wait_option = click.option(
    "--wait/--no-wait", default=True, show_default=True, help="See the move to its end, or return when it is accepted."
)
file_argument = click.argument("file", type=click.Path(path_type=Path))
values_argument = click.argument("values", nargs=-1, metavar="[NAME=VALUE]...")
ions_option = click.option(
    "--ions",
    metavar="SPECIES=N,...",
    help="What is in the trap: 40Ca+=2, several with commas, or none. Default: one of every species of the file.",
)


Command = Callable[..., None]


def command(*lines: str, options: Sequence[Callable[[Command], Command]] = ()) -> Callable[[Command], click.Command]:
    """A command named as its function, ``off_command`` for instance, with ``--json`` and examples in its help.

    ``options`` stand in its help before ``--json``. The first sentence of its docstring is its line in ``trapd --help``.
    """

    def made(function: Command) -> click.Command:
        function = json_option(function)
        for option in reversed(options):
            function = option(function)
        return click.command(epilog=examples(*lines))(function)

    return made


def examples(*lines: str) -> str:
    """The end of a command's help."""
    return "\b\nExamples:\n" + "\n".join(f"  {line}" for line in lines)
