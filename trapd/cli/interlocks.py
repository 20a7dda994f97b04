"""``trapd clear``, and what an interlock says in ``status`` and in the record."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import click

from trapd.cli.answer import Data, tell
from trapd.cli.options import at_option, command, why_option
from trapd.cli.terminal import BAD, CAREFUL, GOOD, say
from trapd.client import Client


@command("trapd clear", "trapd clear vacuum --why 'the pump is back'")
@click.argument("name")
@why_option
@at_option
def clear_command(name: str, why: str, at: str | None) -> None:
    """Clear an interlock that has tripped. Refused while its gauge still reads beyond the level; nothing is switched on."""
    with Client(at) as client:
        tell(
            client.clear(name, why),
            lambda answer: say(("cleared", GOOD), f"  interlock {name} (entry {answer['entry']})"),
        )


def interlock_lines(interlocks: Data) -> Iterator[Sequence[str | tuple[str, str]]]:
    """One for each interlock, the bad news in front."""
    for name, state in interlocks.items():
        if state["tripped"]:
            yield ("TRIPPED", BAD), f"  interlock {name}: {_reading(state)}; `trapd clear {name} --why ...` ends it"
        elif state["unreadable"]:
            yield ("unreadable", CAREFUL), f"  interlock {name}: its gauge does not answer; last {_reading(state)}"
        elif state["warned"]:
            yield ("warning", CAREFUL), f"  interlock {name}: {_reading(state)}"
        else:
            yield (f"interlock {name}: {_reading(state)}",)


def interlock_words(data: Data) -> str:
    """An entry of kind "interlock"."""
    states = [word for word in ("tripped", "warned", "unreadable") if data[word]] or ["clear"]
    action = f", action {data['action']}" if data["tripped"] else ""
    why = f": {data['why']}" if data["why"] else ""
    return f"{data['name']} {' and '.join(states)}, {_reading(data)}{action}{why}"


def _reading(state: Data) -> str:
    return "nothing read yet" if state["value"] is None else f"{state['value']:.3g} Pa"
