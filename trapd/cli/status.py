"""``trapd status``: one sentence, then the numbers."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from trapd.cli.amounts import ends_of, value_of
from trapd.cli.answer import Data, tell, wants_json
from trapd.cli.claims import claim_words, pause_words
from trapd.cli.entries import contents_words
from trapd.cli.finding import show_frequencies
from trapd.cli.interlocks import interlock_lines
from trapd.cli.options import at_option, command
from trapd.cli.terminal import BAD, CAREFUL, FAINT, STRONG, say, table
from trapd.cli.verdicts import show_reasons, show_species, show_warnings
from trapd.cli.words import utc
from trapd.client import Client
from trapd.clock import SystemClock
from trapd.errors import TrapdError
from trapd.setpoint import AMPLITUDE, FREQUENCY, TICKLE_OUTPUT

_MOST_DUE = 3


@command("trapd status", "trapd status --at trap.toml", "trapd status --json")
@at_option
def status_command(at: str | None) -> None:
    """What the trap is doing. The state in a sentence, every setpoint, every species, and what is in doubt."""
    with Client(at) as client:
        status = client.status()
        trap = {} if wants_json() else client.trap()
        allowed = {} if wants_json() or not _is_driven(status["situation"]) else _allowed_now(client)
        tickle = _tickle_of(client) if status["situation"]["off_pending"] else None
    now_us = SystemClock().now_us()
    tell(status, lambda _: _show(status, trap, allowed, tickle, now_us))


def _is_driven(situation: Data) -> bool:
    return bool(situation["outputs"].get("drive.output"))


def _allowed_now(client: Client) -> Data:
    """Empty where it cannot be told (a value not known, a full queue): the rest is worth showing."""
    try:
        return dict(client.window()["allowed"])
    except TrapdError:
        return {}


def _tickle_of(client: Client) -> str | None:
    """The instrument that tickles, as far as it was ever told to be off."""
    try:
        told = client.setpoints(setpoint=TICKLE_OUTPUT, limit=1)
    except TrapdError:
        return None
    return str(told[-1]["instrument"]) if told else None


def state_sentence(situation: Data, tickle: str | None = None) -> str:
    """The state of the trap in plain words. ``tickle``: the instrument that tickles; nobody need have asked for off where
    it alone does not confirm, as after a scan."""
    pending = situation["off_pending"]
    if pending == [tickle] and _is_driven(situation):
        return f"{state_sentence({**situation, 'off_pending': []})[:-1]}; the tickle ({tickle}) is not confirmed off."
    contents, moving, scanning = situation["contents"], situation["moving"], situation["scanning"]
    who, presence = contents_words(contents), contents["presence"]
    if pending:
        return f"Off was asked for and is not confirmed by {', '.join(pending)}."
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


def _show(status: Data, trap: Data, allowed: Data, tickle: str | None, now_us: int) -> None:
    situation, verdict, record = status["situation"], status["verdict"], status["record"]
    simulated = " (simulated)" if status["simulated"] else ""
    say((state_sentence(situation, tickle), STRONG), f"  {status['name']}{simulated}")
    _show_troubles(situation, verdict)
    for line in interlock_lines(situation["interlocks"]):
        say(*line)
    for line in plan_lines(situation, status["upcoming"], now_us):
        say(*line)
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


def plan_lines(situation: Data, upcoming: Sequence[Data], now_us: int) -> Iterator[Sequence[str | tuple[str, str]]]:
    """Who has the trap, and what comes by itself; nothing whose time has passed."""
    claim, pause = (_unless_over(situation[what], now_us) for what in ("claim", "pause"))
    if claim:
        yield ("claimed", CAREFUL), f"  {claim_words(claim)}"
    if pause:
        yield ("paused", CAREFUL), f"  {pause_words(pause)}"
    if upcoming:
        until_us = pause["until_us"] if pause else 0
        comes = (
            f"{one['schedule']} {utc(one['due_us'])}" + (" (paused)" if one["due_us"] < until_us else "")
            for one in upcoming[:_MOST_DUE]
        )
        yield (f"next due: {', '.join(comes)}",)


def _unless_over(one: Data | None, now_us: int) -> Data | None:
    return None if one is None or (one["until_us"] is not None and one["until_us"] <= now_us) else one


def _setpoint_row(name: str, limit: Data, situation: Data, allowed: Data) -> tuple[str, ...]:
    on = situation["outputs"].get("drive.output" if name in (FREQUENCY, AMPLITUDE) else f"{name}.output")
    state = "unknown" if on is None else "on" if on else "off"
    limits = f"{value_of(name, limit['low'])} to {value_of(name, limit['high'])}"
    reach = ""
    if name in allowed:
        reach = ", ".join(" to ".join(ends_of(name, one)) for one in allowed[name]["intervals"]) or "nowhere"
    return name, state, value_of(name, situation["values"].get(name)), limits, reach
