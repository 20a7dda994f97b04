"""A verdict for people: accepted or refused, every reason with its numbers, and how each species moves.

Works on a verdict as data, which is the same from the guard here and from a daemon.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from typing import Any

from trapd.cli.amounts import amount, assignment, in_order, number, value_of
from trapd.cli.terminal import BAD, CAREFUL, FAINT, GOOD, STRONG, say, say_parts, table
from trapd.setpoint import unit_of


def show_verdict(verdict: Mapping[str, Any], *, subject: str) -> None:
    """``subject`` is what was judged: "this state", "the way there"."""
    reasons, warnings = verdict["reasons"], verdict["warnings"]
    if verdict["accepted"]:
        back = ": the way back to safety, no broken rule gets worse" if verdict["recovering"] else ""
        say_parts(("accepted", GOOD), (f"  {subject}{back}", ""))
    else:
        rules = "1 rule" if len(reasons) == 1 else f"{len(reasons)} rules"
        say_parts(("refused", BAD), (f"  {subject}, by {rules}", ""))
    show_reasons(reasons, verdict["values"])
    if warnings:
        say(f"not enforced ({len(warnings)})", CAREFUL)
        show_reasons(warnings, verdict["values"])
    if verdict["species"]:
        say()
        show_species(verdict["species"])


def show_reasons(reasons: Iterable[Mapping[str, Any]], values: Mapping[str, float]) -> None:
    for reason in reasons:
        say_parts((reason["rule"], STRONG), (f"  {reason['message']}", ""), indent=2)
        say(_numbers(reason, values), FAINT, indent=4)


def _numbers(reason: Mapping[str, Any], values: Mapping[str, float]) -> str:
    unit, name = reason["unit"], reason["quantity"]
    parts = [
        f"{label} {amount(reason[key], unit, 9 if unit == 'Hz' else 6)}"
        for label, key in (("found", "found"), ("bound", "bound"))
        if reason[key] is not None
    ]
    nearest = nearest_of(reason, values)
    parts.append(f"nearest allowed {nearest}" if nearest else f"no other {name} would do")
    return ", ".join(parts)


def nearest_of(reason: Mapping[str, Any], values: Mapping[str, float]) -> str | None:
    """``endcaps=231.5V``, None where no value of that setpoint is allowed."""
    name, nearest = reason["quantity"], reason["nearest"]
    if nearest is None:
        return None
    return assignment(name, nearest, values.get(name)) if name in values else amount(nearest, reason["unit"])


def show_species(species: Sequence[Mapping[str, Any]]) -> None:
    """One line an axis; a tilted trap has rows of its 3x3 a and q there."""
    columns = (
        "species",
        "axis",
        ">secular frequency",
        ">q",
        ">a",
        ">beta",
        ">depth*",
    )
    table(columns, [row for motion in species for row in _rows(motion)])
    if any(motion["depth_ev"] is not None for motion in species):
        say("* pseudopotential, the least of x, y and z", FAINT)
    for motion in species:
        if motion["degenerate"]:
            say(f"{motion['ion']}: which frequency belongs to which axis is arbitrary (degenerate)", FAINT)
        if motion["growth_per_s"] is not None:
            say(f"{motion['ion']}: the orbit grows by e in {amount(1 / motion['growth_per_s'] * 1e6, 'µs', 3)}", BAD)


def _rows(motion: Mapping[str, Any]) -> Iterator[tuple[str, ...]]:
    for axis, name in enumerate("xyz"):
        yield (
            motion["ion"] if axis == 0 else "",
            name,
            _frequency(motion, axis),
            _parameter(motion["q"][axis]),
            _parameter(motion["a"][axis]),
            "-" if motion["beta"] is None else f"{motion['beta'][axis]:.4f}",
            amount(motion["depth_ev"], "eV", 4) if axis == 0 else "",
        )


def _frequency(motion: Mapping[str, Any], axis: int) -> str:
    frequencies = motion["secular_frequencies_hz"]
    if frequencies is None:
        return "not stable"
    beyond = "" if motion["first_region"] else " (not first region)"
    return amount(frequencies[axis], "Hz", 5) + beyond


def _parameter(found: Any) -> str:
    return " ".join(number(one, 4) for one in found) if isinstance(found, list | tuple) else number(found, 4)


def show_values(values: Mapping[str, float]) -> None:
    table(("setpoint", ">value"), [(name, value_of(name, value)) for name, value in in_order(values).items()])


__all__ = ["nearest_of", "show_reasons", "show_species", "show_values", "show_verdict", "unit_of"]
