"""Entries of the record for people: one line each, in the words of their kind. Works on entries as data."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping

from trapd.cli.amounts import amount, duration, in_order, millivolts, value_of, with_uncertainty
from trapd.cli.answer import Data
from trapd.cli.finding import finding_words
from trapd.cli.interlocks import interlock_words
from trapd.cli.words import utc
from trapd.setpoint import FREQUENCY

_LONGEST = 160


def sentence(entry: Data) -> str:
    """What the entry says; the whole of it is in ``--json``."""
    say = _SENTENCES.get(entry["kind"], _anything)
    try:
        return say(entry["data"])
    except (KeyError, TypeError, ValueError, IndexError, AttributeError):  # written by another version
        return _anything(entry["data"])


def contents_words(contents: Data) -> str:
    """``2 40Ca+``, ``nothing``, ``unknown, 1 40Ca+ guarded``, ``1 40Ca+, 88Sr+ coming in``."""
    ions = ", ".join(f"{number} {name}" for name, number in contents["ions"].items())
    match contents["presence"]:
        case "none":
            return "nothing"
        case "unknown":
            return f"unknown, {ions or 'every species of the file'} guarded"
        case "loading":
            return ", ".join(part for part in (ions, f"{' and '.join(contents['incoming'])} coming in") if part)
        case _:
            return ions


def _anything(data: Data) -> str:
    text = json.dumps(data, ensure_ascii=False, default=str)
    return text if len(text) <= _LONGEST else text[: _LONGEST - 1] + "…"


def _values(values: Data) -> str:
    return ", ".join(f"{name} {value_of(name, value)}" for name, value in in_order(values).items())


def _why(data: Data) -> str:
    return f": {data['why']}" if data.get("why") else ""


def _request(data: Data) -> str:
    contents = data.get("contents")
    what = (
        _values(data["values"])
        or data.get("point")
        or data.get("scan")
        or (contents and contents_words(contents))
        or ""
    )
    return f"{data['kind']} {what}".strip() + _why(data)


def _halt(data: Data) -> str:
    return ("nothing moved" if data["request"] is None else f"stopped {data['request']}") + _why(data)


def _verdict(data: Data) -> str:
    if data["accepted"]:
        return f"accepted {_values(data['values'])}" + (" (recovering)" if data["recovering"] else "")
    return "refused: " + "; ".join(f"{one['rule']}: {one['message']}" for one in data["reasons"])


def _ramp(data: Data) -> str:
    ways = ", then ".join(
        f"{one['setpoint']} {value_of(one['setpoint'], one['from'])} to {value_of(one['setpoint'], one['to'])}"
        for one in data["stretches"]
    )
    return f"{sum(one['steps'] for one in data['stretches'])} steps, {duration(data['duration_s'])}: {ways}"


def _intent(data: Data) -> str:
    if data["quantity"] == "output":
        return f"{data['setpoint']} {'on' if data['level'] else 'off'} ({data['instrument']})"
    if data["quantity"] == "burst":
        level = millivolts(data["level"])
        return f"{data['setpoint']} {amount(data['value'], 'Hz', 9)}, {level} ({data['instrument']})"
    level = amount(data["level"], "Hz" if data["setpoint"] == FREQUENCY else "V", 9)
    return f"{data['setpoint']} = {value_of(data['setpoint'], data['value'])} ({data['instrument']} told {level})"


def _outcome(data: Data) -> str:
    read = "" if data["readback"] is None else f", read back {data['readback']:.9g}"
    return f"of {data['intent']}: {data['state']}{read}" + (f": {data['error']}" if data["error"] else "")


def _result(data: Data) -> str:
    return f"of {data['request']}: {data['state']}" + (f": {data['error']}" if data["error"] else "")


def _off(data: Data) -> str:
    said = (
        f"{name} {'off' if one['off'] else 'NOT CONFIRMED'} after {duration(one['after_s'])}"
        for name, one in data["instruments"].items()
    )
    return ", ".join(said) + _why(data)


def _plan(data: Data) -> str:
    window = f"{amount(data['low_hz'], 'Hz', 7)} to {amount(data['high_hz'], 'Hz', 7)}"
    level = millivolts(data["level_v"])
    how = f"{data['points']} points of {duration(data['dwell_s'])} a pass, {data['passes']} passes at most"
    return f"{data['scan']}: {data['mode']} of {data['species']}, {window}, {level}, {how}"


def _scan_point(data: Data) -> str:
    where = "tickle off" if data["frequency_hz"] is None else amount(data["frequency_hz"], "Hz", 9)
    return f"pass {data['pass_number']}: {data['counts']} counts in {duration(data['dwell_s'])}, {where}"


def _finding(data: Data) -> str:
    flags = f" ({', '.join(data['flags'])})" if data["flags"] else ""
    return f"{data['scan']}: {data['state']}: {finding_words(data)}{flags}"


def _estimate(data: Data) -> str:
    if data["frequency_hz"] is None:
        return f"pass {data['pass_number']}: {data['message']}"
    return f"pass {data['pass_number']}: {with_uncertainty(data['frequency_hz'], data['uncertainty_hz'])}"


def _secular_frequency(data: Data) -> str:
    return f"{data['mode']} of {data['species']}: {with_uncertainty(data['frequency_hz'], data['uncertainty_hz'])}"


def _due_run(data: Data) -> str:
    reason = f": {data['reason']}" if data["reason"] else ""
    return f"{data['schedule']}, due {utc(data['due_us'])}: {data['state']}{reason}"


def _claim(data: Data) -> str:
    until = f" until {utc(data['until_us'])}" if data.get("until_us") else ""
    return f"{data['state']}{until}" + _why(data)


def _alarm(data: Data) -> str:
    return f"{data['condition']}: {data['message']} (request {data['request']})"


def _identity(data: Data) -> str:
    said = [str(data[key]) for key in ("manufacturer", "model", "serial", "firmware") if data[key]]
    return f"{data['instrument']}: {' '.join(said)}" + (" (simulated)" if data["simulated"] else "")


def _found(data: Data) -> str:
    parts = [*data.get("differences", ())]
    parts += [f"{name} does not answer: {why}" for name, why in data.get("unreachable", {}).items()]
    if data.get("open_intents"):
        parts.append(f"nobody knows what came of intent {', '.join(map(str, data['open_intents']))}")
    if data.get("open_scan"):
        parts.append(f"the scan of request {data['open_scan']} was cut off")
    if data.get("tickling"):
        parts.append("the tickle was on")
    return "; ".join(parts) or ("every instrument answers" if "unreachable" in data else "nothing differs")


def _token(data: Data) -> str:
    return f"{data['action']} {data['name']}" + (f" ({data['role']})" if data.get("role") else "")


_SENTENCES: Mapping[str, Callable[[Data], str]] = {
    "request": _request,
    "verdict": _verdict,
    "ramp": _ramp,
    "intent": _intent,
    "outcome": _outcome,
    "result": _result,
    "contents": lambda data: contents_words(data) + _why(data),
    "off": _off,
    "halt": _halt,
    "plan": _plan,
    "scan_point": _scan_point,
    "estimate": _estimate,
    "finding": _finding,
    "secular_frequency": _secular_frequency,
    "due_run": _due_run,
    "claim": _claim,
    "interlock": interlock_words,
    "pause": _claim,
    "token": _token,
    "alarm": _alarm,
    "identity": _identity,
    "found": _found,
    "stop": lambda data: "the daemon stopped in order",
    "clock": lambda data: f"the wall clock stepped by {data['step_s']:+g} s",
    "start": lambda data: ", ".join(f"{name} {version}" for name, version in data["software"].items()),
    "configuration": lambda data: str(data["source"]),
    "heartbeat": lambda data: _values(data["values"]),
}
