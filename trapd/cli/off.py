"""``trapd off`` and ``trapd stop``: never vetoed, never waiting for anything."""

from __future__ import annotations

from trapd.cli.answer import Data, tell
from trapd.cli.options import at_option, command, hasty_why_option
from trapd.cli.terminal import BAD, CAREFUL, GOOD, say
from trapd.cli.verdicts import show_values
from trapd.client import Client
from trapd.errors import NotConfirmed


@command("trapd off", 'trapd off --why "arc at the feedthrough"')
@hasty_why_option
@at_option
def off_command(why: str, at: str | None) -> None:
    """Everything off now. RF, then every supply; ions are lost. Exit code 4 when an instrument did not confirm."""
    with Client(at) as client:
        answer = client.off(why=why)
    tell(answer, _show_off, exit_code=0 if answer["off"] else NotConfirmed.exit_code)


def _show_off(answer: Data) -> None:
    for name, one in answer["instruments"].items():
        if one["off"]:
            said, rest = ("off", GOOD), f"  confirmed after {one['after_s']:.2f} s"
        else:
            said, rest = ("NOT CONFIRMED", BAD), f"  after {one['after_s']:.2f} s: {one['error']}"
        say(f"{name}  ", said, rest)
    if not answer["off"]:
        say(("The daemon tries again every second. Until it confirms, take its output for live.", BAD))
    if not answer["recorded"]:
        say(("The record could not be written; the entry is kept and tried again.", CAREFUL))


@command("trapd stop", 'trapd stop --why "wrong direction"')
@hasty_why_option
@at_option
def stop_command(why: str, at: str | None) -> None:
    """Stop the move or the scan in progress where it is. Every output holds; the tickle goes off."""
    with Client(at) as client:
        tell(client.stop(why=why), _show_stop)


def _show_stop(answer: Data) -> None:
    say("stopped; every output holds" if answer["stopped"] else "nothing was moving; every output holds")
    show_values(answer["values"])
