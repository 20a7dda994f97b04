"""``trapd ions``: what a person says is in the trap."""

from __future__ import annotations

import click

from trapd.cli.answer import Data, tell
from trapd.cli.entries import contents_words
from trapd.cli.options import at_option, command, interrupt_option, why_option
from trapd.cli.terminal import GOOD, say
from trapd.cli.verdicts import show_warnings, tell_refusal
from trapd.cli.words import read_contents
from trapd.client import Client
from trapd.errors import GuardRefused


@command(
    'trapd ions loading 40Ca+ --why "oven on"',
    'trapd ions 40Ca+=2 --why "two on the camera"',
    'trapd ions none --why "shutter closed, nothing on the camera"',
    'trapd ions unknown --why "somebody opened the shutter"',
)
@click.argument("contents", nargs=-1, required=True, metavar="SPECIES=N... | none | unknown | loading SPECIES...")
@why_option
@interrupt_option
@at_option
def ions_command(contents: tuple[str, ...], why: str, interrupt: bool, at: str | None) -> None:
    """Say what is in the trap. Species and how many, none, unknown, or loading and what comes in.

    What is held is guarded in every move. Declaring it is refused unless the present state is safe for it.
    """
    said = read_contents(contents)
    with Client(at) as client:
        try:
            tell(client.ions(said.presence, said.ions, said.incoming, why=why, interrupt=interrupt), _show)
        except GuardRefused as error:
            tell_refusal(error, why)


def _show(answer: Data) -> None:
    contents = answer["contents"]
    say(("noted", GOOD), f"  {contents['presence']}: {contents_words(contents)} (entry {answer['entry']})")
    show_warnings(answer["verdict"])
