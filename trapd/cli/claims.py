"""``trapd claim``, ``release``, ``pause`` and ``resume``: who has the trap for themselves, and when the schedule rests."""

from __future__ import annotations

from datetime import UTC, datetime

import click

from trapd.cli.answer import Data, tell
from trapd.cli.options import at_option, command, hasty_why_option, interrupt_option, why_option
from trapd.cli.terminal import GOOD, say
from trapd.cli.words import read_until, utc
from trapd.client import Client

_WHEN = "A while (30min, 2h), 18:00, or a time (without an offset: local)."


@command(
    'trapd claim --why "aligning the cooling beam" --until 18:00',
    'trapd claim --why "data for the thesis"',
    options=(
        click.option("--until", metavar="WHEN", help=f"{_WHEN} Default: until released."),
        why_option,
        interrupt_option,
        at_option,
    ),
)
def claim_command(until: str | None, why: str, interrupt: bool, at: str | None) -> None:
    """Keep the trap for yourself. Others are refused unless they --interrupt, and the schedule waits. Off ends it."""
    moment = None if until is None else read_until(until, datetime.now(UTC))
    with Client(at) as client:
        claimed = client.claim(why, until=moment, interrupt=interrupt)
        tell(claimed, lambda answer: _show("claimed", answer, claim_words(answer["claim"])))


@command("trapd release", 'trapd release --interrupt --why "she went home"')
@interrupt_option
@hasty_why_option
@at_option
def release_command(interrupt: bool, why: str, at: str | None) -> None:
    """End a claim. Somebody else's only with --interrupt."""
    with Client(at) as client:
        tell(
            client.release(why, interrupt=interrupt), lambda answer: _show("released", answer, "nobody claims the trap")
        )


@command(
    'trapd pause --until 2h --why "beam time"',
    'trapd pause --until 2026-12-01T18:00Z --why "visitors"',
    options=(click.option("--until", required=True, metavar="WHEN", help=_WHEN), why_option, at_option),
)
def pause_command(until: str, why: str, at: str | None) -> None:
    """Nothing of the schedule runs before a time. A scheduled scan that is under way goes on."""
    moment = read_until(until, datetime.now(UTC))
    with Client(at) as client:
        tell(client.pause(moment, why), lambda answer: _show("paused", answer, pause_words(answer["pause"])))


@command("trapd resume", 'trapd resume --why "they left early"')
@hasty_why_option
@at_option
def resume_command(why: str, at: str | None) -> None:
    """End a pause: the schedule goes on."""
    with Client(at) as client:
        tell(client.resume(why), lambda answer: _show("resumed", answer, "the schedule goes on"))


def claim_words(claim: Data) -> str:
    """``by ada until 2026-03-01 18:00:00 UTC: aligning``."""
    return f"by {claim['who']}{_until(claim)}: {claim['why']}"


def pause_words(pause: Data) -> str:
    return f"the schedule, by {pause['who']}{_until(pause)}: {pause['why']}"


def _until(one: Data) -> str:
    return "" if one["until_us"] is None else f" until {utc(one['until_us'])}"


def _show(state: str, answer: Data, words: str) -> None:
    say((state, GOOD), f"  {words} (entry {answer['entry']})")
