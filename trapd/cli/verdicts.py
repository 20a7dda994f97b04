"""A verdict for people: accepted or refused, every reason with its numbers, and how each species moves.

Works on a verdict as data, which is the same from the guard here and from a daemon.
"""

from __future__ import annotations

import shlex
from collections.abc import Iterable, Iterator, Mapping, Sequence
from types import MappingProxyType
from typing import Any

import click

from trapd.cli.amounts import amount, assignment, in_order, number, value_of
from trapd.cli.answer import Data, tell
from trapd.cli.terminal import BAD, CAREFUL, FAINT, GOOD, STRONG, say, table
from trapd.errors import GuardRefused

NO_VALUES: Mapping[str, float] = MappingProxyType({})


def show_verdict(verdict: Data, *, subject: str) -> None:
    """``subject`` is what was judged: "this state", "the way there"."""
    if verdict["accepted"]:
        back = ": the way back to safety, no broken rule gets worse" if verdict["recovering"] else ""
        say(("accepted", GOOD), f"  {subject}{back}")
    else:
        count = len(verdict["reasons"])
        say(("refused", BAD), f"  {subject}, by {count} rule{'s' if count > 1 else ''}")
    show_reasons(verdict["reasons"], verdict["values"])
    show_warnings(verdict)
    if verdict["species"]:
        say()
        show_species(verdict["species"])


def tell_refusal(error: GuardRefused, why: str, asked: Mapping[str, float] = NO_VALUES) -> None:
    """Every reason; and what was asked with the nearest allowed values in it, as a command to paste. Ends the command."""
    verdict, entry = error.details["verdict"], error.details["entry"]

    def show(_: Data) -> None:
        say(("refused", BAD), f"  nothing was sent (entry {entry})")
        show_reasons(verdict["reasons"], verdict["values"])
        nearest = {reason["quantity"]: _nearest(reason, verdict["values"]) for reason in verdict["reasons"]}
        words = {name: assignment(name, value) for name, value in asked.items()} | nearest
        if words and all(word and "=" in word for word in words.values()):
            # Not wrapped: it is there to be pasted.
            click.echo(f"    trapd set {' '.join(map(str, words.values()))} --why {shlex.quote(why)}")

    tell({"entry": entry, "accepted": False, "verdict": verdict}, show, exit_code=error.exit_code)


def show_warnings(verdict: Data) -> None:
    if verdict["warnings"]:
        say((f"not enforced ({len(verdict['warnings'])})", CAREFUL))
        show_reasons(verdict["warnings"], verdict["values"])


def show_reasons(reasons: Iterable[Data], values: Mapping[str, float]) -> None:
    for reason in reasons:
        say((reason["rule"], STRONG), f"  {reason['message']}", indent=2)
        say((_numbers(reason, values), FAINT), indent=4)


def _numbers(reason: Data, values: Mapping[str, float]) -> str:
    unit, name = reason["unit"], reason["quantity"]
    parts = [
        f"{label} {amount(reason[key], unit, 9 if unit == 'Hz' else 6)}"
        for label, key in (("found", "found"), ("bound", "bound"))
        if reason[key] is not None
    ]
    nearest = _nearest(reason, values)
    parts.append(f"nearest allowed {nearest}" if nearest else f"no other {name} would do")
    return ", ".join(parts)


def _nearest(reason: Data, values: Mapping[str, float]) -> str | None:
    """``endcaps=231.5V``, None where no value of that setpoint is allowed."""
    name, nearest = reason["quantity"], reason["nearest"]
    if nearest is None:
        return None
    return assignment(name, nearest, values.get(name)) if name in values else amount(nearest, reason["unit"])


def show_species(species: Sequence[Data]) -> None:
    """One line an axis; a tilted trap has rows of its 3x3 a and q there."""
    columns = ("species", "axis", ">secular frequency", ">q", ">a", ">beta", ">depth*")
    table(columns, [row for motion in species for row in _rows(motion)])
    if any(motion["depth_ev"] is not None for motion in species):
        say(("* pseudopotential, the least of x, y and z", FAINT))
    for motion in species:
        if motion["degenerate"]:
            say((f"{motion['ion']}: which frequency belongs to which axis is arbitrary (degenerate)", FAINT))
        if motion["growth_per_s"] is not None:
            say((f"{motion['ion']}: the orbit grows by e in {amount(1 / motion['growth_per_s'] * 1e6, 'µs', 3)}", BAD))


def _rows(motion: Data) -> Iterator[tuple[str, ...]]:
    for axis, name in enumerate("xyz"):
        yield (
            motion["ion"] if axis == 0 else "",
            name,
            _frequency(motion, axis),
            _parameter(motion["q"][axis]),
            _parameter(motion["a"][axis]),
            "-" if motion["beta"] is None else f"{motion['beta'][axis]:.4f}",
            _depth(motion) if axis == 0 else "",
        )


def _depth(motion: Data) -> str:
    return amount(motion["depth_ev"], "eV", 4) if motion["first_region"] and motion["depth_ev"] is not None else "-"


def _frequency(motion: Data, axis: int) -> str:
    frequencies = motion["secular_frequencies_hz"]
    if frequencies is None:
        return "not stable"
    beyond = "" if motion["first_region"] else " (not first region)"
    return amount(frequencies[axis], "Hz", 5) + beyond


def _parameter(found: Any) -> str:
    return " ".join(number(one, 4) for one in found) if isinstance(found, list | tuple) else number(found, 4)


def show_values(values: Mapping[str, float]) -> None:
    table(("setpoint", ">value"), [(name, value_of(name, value)) for name, value in in_order(values).items()])
