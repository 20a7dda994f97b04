"""``trapd on`` and ``trapd empty``: RF comes on, or goes off until no ion can be left."""

from __future__ import annotations

import click

from trapd.cli.answer import examples, json_option
from trapd.cli.daemon import daemon_option, why_option
from trapd.cli.moves import move, wait_option
from trapd.errors import BadRequest


@click.command(
    "on",
    short_help="Switch an empty trap on and ramp it to a point.",
    epilog=examples('trapd on --why "start of the day"', 'trapd on work --why "after the bake"'),
)
@click.argument("point", required=False)
@why_option
@wait_option
@json_option
@daemon_option
def on_command(point: str | None, why: str, wait: bool, at: str | None) -> None:
    """Switch an empty trap on: supplies at 0 V, RF at its least level, then the ramp to POINT (default: the first)."""
    move(at, wait, why, lambda client: client.on(point, why=why, wait=False))


@click.command(
    "empty",
    short_help="Let every ion go, then back to a point or off.",
    epilog=examples('trapd empty --why "wrong isotope"', 'trapd empty --stay-off --why "leaving for the night"'),
)
@click.argument("point", required=False)
@click.option("--stay-off", is_flag=True, help="RF stays off afterwards.")
@why_option
@wait_option
@json_option
@daemon_option
def empty_command(point: str | None, stay_off: bool, why: str, wait: bool, at: str | None) -> None:
    """Let every ion go: RF off until nothing can be left, then to POINT (default: the first), or --stay-off."""
    if stay_off and point is not None:
        raise BadRequest(f'--stay-off goes nowhere; leave out "{point}"')
    move(at, wait, why, lambda client: client.empty(point, stay_off=stay_off, why=why, wait=False))
