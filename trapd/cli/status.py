"""``trapd status``: one sentence, then the numbers."""

from __future__ import annotations

from collections.abc import Sequence

from trapd.cli.amounts import ends_of, value_of
from trapd.cli.answer import Data, tell, wants_json
from trapd.cli.claims import claim_words, pause_words
from trapd.cli.entries import contents_words
from trapd.cli.finding import show_frequencies
from trapd.cli.options import at_option, command
from trapd.cli.terminal import BAD, CAREFUL, FAINT, STRONG, say, table
from trapd.cli.verdicts import show_reasons, show_species, show_warnings
from trapd.cli.words import utc
from trapd.client import Client
from trapd.errors import TrapdError
from trapd.setpoint import AMPLITUDE, FREQUENCY

_MOST_DUE = 3


@command("trapd status", "trapd status --at trap.toml", "trapd status --json")
@at_option
def status_command(at: str | None) -> None:
    """What the trap is doing. The state in a sentence, every setpoint, every species, and what is in doubt."""
    with Client(at) as client:
        status = client.status()
        trap = {} if wants_json() else client.trap()
        allowed = {} if wants_json() or not _is_driven(status["situation"]) else _allowed_now(client)
    tell(status, lambda _: _show(status, trap, allowed))


def _is_driven(situation: Data) -> bool:
    return bool(situation["outputs"].get("drive.output"))


def _allowed_now(client: Client) -> Data:
    """Empty where it cannot be told (a value not known, a full queue): the rest is worth showing."""
    try:
        return dict(client.window()["allowed"])
    except TrapdError:
        return {}


def state_sentence(situation: Data) -> str:
    """The state of the trap in plain words."""
    contents, moving, scanning = situation["contents"], situation["moving"], situation["scanning"]
    who, presence = contents_words(contents), contents["presence"]
    if situation["off_pending"]:
        return f"Off was asked for and is not confirmed by {', '.join(situation['off_pending'])}."
    if not any(situation["outputs"].values()):
        return "Off." if presence == "none" else f"Off. In the trap: {who}."
    held = {
        "held": f"holding {who}",
        "loading": f"loading: {who}",
        "none": "nothing is in the trap",
        "unknown": f"what is in the trap is {who}",
    }[presence]
    if not moving and not _is_driven(situation):
        return f"RF off, supplies on; {held}."
    if moving:
        return f"Moving {moving['setpoint']}, step {moving['step']} of {moving['steps']}; {held}."
    if scanning:
        return f"{_scan_words(scanning)}; {held}."
    return f"On; {held}." if presence in ("none", "unknown") else f"{held[0].upper()}{held[1:]}."


def _scan_words(scanning: Data) -> str:
    """``Scanning x (x of 40Ca+) for schedule, pass 3 of 12``."""
    what = f"{scanning['scan']} ({scanning['mode']} of {scanning['species']}) for {scanning['author']}"
    return f"Scanning {what}, pass {scanning['pass_number']} of {scanning['passes']}"


def _show(status: Data, trap: Data, allowed: Data) -> None:
    situation, verdict, record = status["situation"], status["verdict"], status["record"]
    simulated = " (simulated)" if status["simulated"] else ""
    say((state_sentence(situation), STRONG), f"  {status['name']}{simulated}")
    _show_troubles(situation, verdict)
    _show_plans(situation, status["upcoming"])
    say()
    rows = [_setpoint_row(name, limit, situation, allowed) for name, limit in trap["setpoints"].items()]
    table(("setpoint", "output", ">value", "limits", "allowed now" if allowed else ""), rows)
    if verdict is not None and verdict["species"] and _is_driven(situation):
        say()
        show_species(verdict["species"])
    if status["frequencies"]:
        say()
        show_frequencies(status["frequencies"])
    say()
    say((f"record: entry {record['last_seq']}, head {record['head']}", FAINT))


def _show_troubles(situation: Data, verdict: Data | None) -> None:
    for name, why in situation["unreachable"].items():
        say(("unreachable", BAD), f"  {name}: {why}")
    for words in situation["doubt"]:
        say(("doubt", CAREFUL), f"  {words}")
    if situation["unwritten"]:
        say(("record", BAD), f"  {situation['unwritten']} entries wait to be written")
    if verdict is None or not _is_driven(situation):
        return
    if not verdict["accepted"]:
        say(("the present state breaks rules; only a way back to safety is accepted", BAD))
        show_reasons(verdict["reasons"], verdict["values"])
    show_warnings(verdict)


def _show_plans(situation: Data, upcoming: Sequence[Data]) -> None:
    """Who has the trap, and what comes by itself."""
    if situation["claim"]:
        say(("claimed", CAREFUL), f"  {claim_words(situation['claim'])}")
    if situation["pause"]:
        say(("paused", CAREFUL), f"  {pause_words(situation['pause'])}")
    if upcoming:
        comes = ", ".join(f"{one['schedule']} {utc(one['due_us'])}" for one in upcoming[:_MOST_DUE])
        say(f"next due: {comes}")


def _setpoint_row(name: str, limit: Data, situation: Data, allowed: Data) -> tuple[str, ...]:
    on = situation["outputs"].get("drive.output" if name in (FREQUENCY, AMPLITUDE) else f"{name}.output")
    state = "unknown" if on is None else "on" if on else "off"
    limits = f"{value_of(name, limit['low'])} to {value_of(name, limit['high'])}"
    reach = ""
    if name in allowed:
        reach = ", ".join(" to ".join(ends_of(name, one)) for one in allowed[name]["intervals"]) or "nowhere"
    return name, state, value_of(name, situation["values"].get(name)), limits, reach
