"""``trapd off`` and ``trapd stop``: never vetoed, never waiting for anything."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import click

from trapd.cli.answer import examples, json_option, leave_with, tell_json, wants_json
from trapd.cli.daemon import connect, daemon_option
from trapd.errors import NotConfirmed

_WHY = "A reason, if there is time for one."


@click.command(
    "off", short_help="Everything off now.", epilog=examples("trapd off", 'trapd off --why "arc at the feedthrough"')
)
@click.option("--why", default="", metavar="TEXT", help=_WHY)
@json_option
@daemon_option
def off_command(why: str, at: str | None) -> None:
    """Everything off now: RF, then every supply. Ions are lost. Exit code 4 when an instrument did not confirm."""
    with connect(at) as client:
        answer = client.off(why=why)
    if wants_json():
        tell_json(answer)
    else:
        show_off(answer)
    leave_with(0 if answer["off"] else NotConfirmed.exit_code)


def show_off(answer: Mapping[str, Any]) -> None:
    from trapd.cli.terminal import BAD, CAREFUL, GOOD, say, say_parts

    for name, one in answer["instruments"].items():
        if one["off"]:
            say_parts((f"{name}  ", ""), ("off", GOOD), (f"  confirmed after {one['after_s']:.2f} s", ""))
        else:
            say_parts(
                (f"{name}  ", ""), ("NOT CONFIRMED", BAD), (f"  after {one['after_s']:.2f} s: {one['error']}", "")
            )
    if not answer["off"]:
        say("The daemon tries again every second. Until it confirms, take its output for live.", BAD)
    if not answer["recorded"]:
        say("The record could not be written; the entry is kept and tried again.", CAREFUL)


@click.command(
    "stop",
    short_help="Stop the move in progress where it is.",
    epilog=examples("trapd stop", 'trapd stop --why "wrong direction"'),
)
@click.option("--why", default="", metavar="TEXT", help=_WHY)
@json_option
@daemon_option
def stop_command(why: str, at: str | None) -> None:
    """Stop the move in progress where it is. Every output holds."""
    with connect(at) as client:
        answer = client.stop(why=why)
    if wants_json():
        tell_json(answer)
        return
    from trapd.cli.terminal import say
    from trapd.cli.verdicts import show_values

    say("stopped; every output holds" if answer["stopped"] else "nothing was moving; every output holds")
    show_values(answer["values"])
