"""``trapd window``: where each setpoint may stand, the others held."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import click

from trapd.cli.answer import examples, json_option, plain, tell_json, wants_json
from trapd.cli.offline import contents_of, file_argument, ions_option, read_model, state_of


@click.command(
    "window",
    short_help="Where each setpoint may stand, the others held.",
    epilog=examples(
        "trapd window trap.toml",
        "trapd window trap.toml drive.amplitude=200V --ions 40Ca+=1",
        "trapd window trap.toml --json",
    ),
)
@file_argument
@click.argument("values", nargs=-1, metavar="[NAME=VALUE]...")
@ions_option
@json_option
def window_command(file: Path, values: tuple[str, ...], ions: str | None) -> None:
    """All stable and all allowed intervals of each setpoint, the others held.

    Stable: first stability region, no margin. Allowed: margin, rules and limits as well.
    """
    config, model = read_model(file)
    contents = contents_of(config, ions)
    state = state_of(config, model, values)
    from trapd.guard.contents import watched
    from trapd.guard.window import window

    who = watched(model, contents)
    found = plain(window(model, who.enforced + who.incoming, state))
    if wants_json():
        tell_json(found)
        return
    from trapd.cli.terminal import say
    from trapd.cli.verdicts import show_values

    show_values(state)
    say()
    show_window(found)


def show_window(found: Mapping[str, Any]) -> None:
    from trapd.cli.terminal import say, table

    columns = ("setpoint", ">from", ">to", "ends below at", "ends above at")
    titles = {
        "stable": "stable: first region, no margin",
        "allowed": "allowed: margin, rules and limits as well",
    }
    for kind, title in titles.items():
        say(title, "bold")
        table(columns, [row for name, reach in found[kind].items() for row in _rows(name, reach)], indent=2, wrapping=2)
        if kind == "stable":
            say()


def _rows(name: str, reach: Mapping[str, Any]) -> Iterator[tuple[str, ...]]:
    from trapd.cli.amounts import end_of

    if not reach["intervals"]:
        yield (name, "nowhere", "", "", "")
    for index, interval in enumerate(reach["intervals"]):
        ends = (end_of(name, interval["low"], upper=False), end_of(name, interval["high"], upper=True))
        yield (name if index == 0 else "", *ends, _cause(interval["low_by"]), _cause(interval["high_by"]))


def _cause(end: Mapping[str, Any]) -> str:
    """``limit``, ``level``, ``beta = 1 of 40Ca+ x``, ``margin to beta = 1 of 40Ca+ x``."""
    whose = " ".join(part for part in (end["species"], end["mode"]) if part)
    edge = f"{end['edge']} of {whose}" if end["edge"] else whose
    rule = end["rule"] or ("" if end["kind"] == "edge" else end["kind"])
    if rule and edge:
        return f"{rule} to {edge}" if end["edge"] else f"{rule} of {edge}"
    return rule or edge
