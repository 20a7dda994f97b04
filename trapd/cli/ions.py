"""``trapd ions``: what a person says is in the trap."""

from __future__ import annotations

from typing import Any

import click

from trapd.cli.answer import examples, json_option, leave_with, tell_json, wants_json
from trapd.cli.assignments import read_contents
from trapd.cli.daemon import connect, daemon_option, why_option
from trapd.errors import GuardRefused


@click.command(
    "ions",
    short_help="Say what is in the trap.",
    epilog=examples(
        'trapd ions loading 40Ca+ --why "oven on"',
        'trapd ions 40Ca+=2 --why "two on the camera"',
        'trapd ions none --why "shutter closed, nothing on the camera"',
        'trapd ions unknown --why "somebody opened the shutter"',
    ),
)
@click.argument("contents", nargs=-1, required=True, metavar="SPECIES=N... | none | unknown | loading SPECIES...")
@why_option
@json_option
@daemon_option
def ions_command(contents: tuple[str, ...], why: str, at: str | None) -> None:
    """Say what is in the trap: species and how many, none, unknown, or loading and what comes in.

    What is held is guarded in every move. Declaring it is refused unless the present state is safe for it.
    """
    from trapd.cli.following import tell_refusal

    said = read_contents(contents)
    with connect(at) as client:
        try:
            answer = client.ions(said.presence, said.ions, said.incoming, why=why)
        except GuardRefused as error:
            tell_refusal(error, why, {})
            leave_with(error.exit_code)
            return
    if wants_json():
        tell_json(answer)
    else:
        show_contents(answer)


def show_contents(answer: dict[str, Any]) -> None:
    from trapd.cli.entries import contents_words
    from trapd.cli.terminal import CAREFUL, GOOD, say, say_parts
    from trapd.cli.verdicts import show_reasons

    contents, verdict = answer["contents"], answer["verdict"]
    say_parts(("noted", GOOD), (f"  {contents['presence']}: {contents_words(contents)} (entry {answer['entry']})", ""))
    if verdict["warnings"]:
        say(f"not enforced ({len(verdict['warnings'])})", CAREFUL)
        show_reasons(verdict["warnings"], verdict["values"])
