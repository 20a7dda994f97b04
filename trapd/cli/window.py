"""``trapd window``: where each setpoint may stand, the others held."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import asdict
from pathlib import Path

from trapd.cli.amounts import ends_of
from trapd.cli.answer import Data, tell
from trapd.cli.options import command, file_argument, ions_option, values_argument
from trapd.cli.terminal import STRONG, say, table
from trapd.cli.verdicts import show_values

_TITLES = {"stable": "stable: first region, no margin", "allowed": "allowed: margin, rules and limits as well"}


@command(
    "trapd window trap.toml",
    "trapd window trap.toml drive.amplitude=200V --ions 40Ca+=1",
    "trapd window trap.toml --json",
)
@file_argument
@values_argument
@ions_option
def window_command(file: Path, values: tuple[str, ...], ions: str | None) -> None:
    """Where each setpoint may stand, the others held. All intervals, the stable and the allowed ones.

    Stable: first stability region, no margin. Allowed: margin, rules and limits as well.
    """
    from trapd.cli.offline import contents_of, read_model, state_of
    from trapd.guard.contents import watched
    from trapd.guard.window import window

    config, model = read_model(file)
    who = watched(model, contents_of(config, ions))
    state = state_of(config, model, values)

    def show(found: Data) -> None:
        show_values(state)
        for kind, title in _TITLES.items():
            say()
            say((title, STRONG))
            rows = [row for name, reach in found[kind].items() for row in _rows(name, reach)]
            table(("setpoint", ">from", ">to", "ends below at", "ends above at"), rows, indent=2, wrapping=2)

    tell(asdict(window(model, who.enforced + who.incoming, state)), show)


def _rows(name: str, reach: Data) -> Iterator[tuple[str, ...]]:
    if not reach["intervals"]:
        yield (name, "nowhere", "", "", "")
    for index, interval in enumerate(reach["intervals"]):
        causes = (_cause(interval["low_by"]), _cause(interval["high_by"]))
        yield (name if index == 0 else "", *ends_of(name, interval), *causes)


def _cause(end: Data) -> str:
    """``limit``, ``level``, ``beta = 1 of 40Ca+ x``, ``margin to beta = 1 of 40Ca+ x``."""
    whose = " ".join(part for part in (end["species"], end["mode"]) if part)
    edge = f"{end['edge']} of {whose}" if end["edge"] else whose
    rule = end["rule"] or ("" if end["kind"] == "edge" else end["kind"])
    if rule and edge:
        return f"{rule} to {edge}" if end["edge"] else f"{rule} of {edge}"
    return rule or edge
