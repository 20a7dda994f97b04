"""``trapd set``, ``go`` and ``back``: the setpoints move, step by step, and are read back."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

import click

from trapd.cli.answer import INTERRUPTED, Function, examples, json_option, leave_with
from trapd.cli.assignments import split_list
from trapd.cli.daemon import connect, daemon_option, why_option
from trapd.errors import BadRequest, GuardRefused

if TYPE_CHECKING:
    from trapd.client import Client


NO_VALUES: Mapping[str, float] = MappingProxyType({})


def wait_option(command: Function) -> Function:
    text = "See the move to its end, or return when it is accepted."
    return click.option("--wait/--no-wait", default=True, show_default=True, help=text)(command)


def move(
    at: str | None,
    wait: bool,
    why: str,
    ask: Callable[[Client], dict[str, Any]],
    asked: Mapping[str, float] = NO_VALUES,
) -> None:
    """Ask for a move and tell what came of it: a refusal with every reason, or its end. ``asked``: values by name."""
    from trapd.cli.following import LEFT, finish, tell_refusal

    with connect(at) as client:
        try:
            finish(client, ask(client), wait=wait)
        except GuardRefused as error:
            tell_refusal(error, why, asked)
            leave_with(error.exit_code)
        except KeyboardInterrupt:
            click.echo(f"\n{LEFT}", err=True)
            leave_with(INTERRUPTED)


@click.command(
    "set",
    short_help="Move setpoints to values.",
    epilog=examples(
        'trapd set endcaps=200V --why "stiffer along z"',
        'trapd set drive.amplitude=300V rods=0.5V --why "day setting" --no-wait',
    ),
)
@click.argument("values", nargs=-1, required=True, metavar="NAME=VALUE...")
@why_option
@wait_option
@json_option
@daemon_option
def set_command(values: tuple[str, ...], why: str, wait: bool, at: str | None) -> None:
    """Move setpoints to values: judged first, then ramped one at a time, each step recorded, read back and compared."""
    from trapd.config.quantity import parse_assignments

    wanted = parse_assignments(split_list(values))

    def ask(client: Client) -> dict[str, Any]:
        check_names(wanted, client.trap()["setpoints"])
        return client.set(wanted, why=why, wait=False)

    move(at, wait, why, ask, wanted)


def check_names(wanted: Mapping[str, float], known: Mapping[str, Any]) -> None:
    """The daemon refuses a wrong name too; here it costs no entry of the record, and may be near a right one."""
    from trapd.config.quantity import closest

    for name in wanted:
        if name not in known:
            raise BadRequest(f'"{name}" is no setpoint of this trap{closest(name, known)}; nothing was sent')


@click.command(
    "go",
    short_help="Move to a named point of the trap file.",
    epilog=examples('trapd go work --why "back to the day\'s setting"'),
)
@click.argument("point")
@why_option
@wait_option
@json_option
@daemon_option
def go_command(point: str, why: str, wait: bool, at: str | None) -> None:
    """Move to a named point of the trap file."""
    move(at, wait, why, lambda client: client.go(point, why=why, wait=False))


@click.command(
    "back", short_help="Move to the state before the last move.", epilog=examples('trapd back --why "that was worse"')
)
@why_option
@wait_option
@json_option
@daemon_option
def back_command(why: str, wait: bool, at: str | None) -> None:
    """Move to the state before the last completed move."""
    move(at, wait, why, lambda client: client.back(why=why, wait=False))
