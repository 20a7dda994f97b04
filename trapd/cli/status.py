"""``trapd status``: one sentence, then the numbers."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import click

from trapd.cli.answer import examples, json_option, tell_json, wants_json
from trapd.cli.daemon import connect, daemon_option
from trapd.errors import TrapdError
from trapd.setpoint import AMPLITUDE, FREQUENCY

if TYPE_CHECKING:
    from trapd.client import Client

Data = Mapping[str, Any]


@click.command(
    "status",
    short_help="What the trap is doing.",
    epilog=examples("trapd status", "trapd status --at trap.toml", "trapd status --json"),
)
@json_option
@daemon_option
def status_command(at: str | None) -> None:
    """What the trap is doing: the state in a sentence, every setpoint, every species, and what is in doubt."""
    with connect(at) as client:
        status = client.status()
        if wants_json():
            tell_json(status)
            return
        trap = client.trap()
        allowed = _allowed_now(client) if status["situation"]["outputs"].get("drive.output") else {}
    show_status(status, trap, allowed)


def _allowed_now(client: Client) -> Data:
    """Empty where it cannot be told (a value not known, a full queue): the rest is worth showing."""
    try:
        allowed: Data = client.window()["allowed"]
    except TrapdError:
        return {}
    return allowed


def state_sentence(situation: Data) -> str:
    """The state of the trap in plain words."""
    from trapd.cli.entries import contents_words

    contents, moving = situation["contents"], situation["moving"]
    if situation["off_pending"]:
        return f"Off was asked for and is not confirmed by {', '.join(situation['off_pending'])}."
    if not any(situation["outputs"].values()):
        return "Off." if contents["presence"] == "none" else f"Off. In the trap: {contents_words(contents)}."
    held = {
        "held": f"holding {contents_words(contents)}",
        "loading": f"loading: {contents_words(contents)}",
        "none": "nothing is in the trap",
        "unknown": f"what is in the trap is {contents_words(contents)}",
    }[contents["presence"]]
    if moving:
        return f"Moving {moving['setpoint']}, step {moving['step']} of {moving['steps']}; {held}."
    return f"On; {held}." if contents["presence"] in ("none", "unknown") else f"{held[0].upper()}{held[1:]}."


def show_status(status: Data, trap: Data, allowed: Data) -> None:
    from trapd.cli.terminal import FAINT, STRONG, say, say_parts
    from trapd.cli.verdicts import show_species

    situation, verdict = status["situation"], status["verdict"]
    simulated = " (simulated)" if status["simulated"] else ""
    say_parts((state_sentence(situation), STRONG), (f"  {status['name']}{simulated}", ""))
    _show_troubles(situation, verdict)
    say()
    _show_setpoints(situation, trap, allowed)
    if verdict is not None and verdict["species"] and situation["outputs"].get("drive.output"):
        say()
        show_species(verdict["species"])
    say()
    record = status["record"]
    say(f"record: entry {record['last_seq']}, head {record['head']}", FAINT)


def _show_troubles(situation: Data, verdict: Data | None) -> None:
    from trapd.cli.terminal import BAD, CAREFUL, say, say_parts
    from trapd.cli.verdicts import show_reasons

    for name, why in situation["unreachable"].items():
        say_parts(("unreachable", BAD), (f"  {name}: {why}", ""))
    for words in situation["doubt"]:
        say_parts(("doubt", CAREFUL), (f"  {words}", ""))
    if situation["unwritten"]:
        say_parts(("record", BAD), (f"  {situation['unwritten']} entries wait to be written", ""))
    if verdict is None or not any(situation["outputs"].values()):
        return
    if not verdict["accepted"]:
        say("the present state breaks rules; only a way back to safety is accepted", BAD)
        show_reasons(verdict["reasons"], verdict["values"])
    if verdict["warnings"]:
        say(f"not enforced ({len(verdict['warnings'])})", CAREFUL)
        show_reasons(verdict["warnings"], verdict["values"])


def _show_setpoints(situation: Data, trap: Data, allowed: Data) -> None:
    from trapd.cli.amounts import value_of
    from trapd.cli.terminal import table

    columns = ("setpoint", "output", ">value", "limits", "allowed now" if allowed else "")
    rows = []
    for name, limit in trap["setpoints"].items():
        output = "drive.output" if name in (FREQUENCY, AMPLITUDE) else f"{name}.output"
        on = situation["outputs"].get(output)
        limits = f"{value_of(name, limit['low'])} to {value_of(name, limit['high'])}"
        value = value_of(name, situation["values"].get(name))
        state = "unknown" if on is None else "on" if on else "off"
        rows.append((name, state, value, limits, _allowed(name, allowed)))
    table(columns, rows)


def _allowed(name: str, allowed: Data) -> str:
    from trapd.cli.amounts import end_of

    if name not in allowed:
        return ""
    intervals = (
        f"{end_of(name, one['low'], upper=False)} to {end_of(name, one['high'], upper=True)}"
        for one in allowed[name]["intervals"]
    )
    return ", ".join(intervals) or "nowhere"
