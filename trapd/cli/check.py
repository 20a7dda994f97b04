"""``trapd check``: what a trap file means, and with --instruments whether its instruments answer."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from trapd.cli.answer import examples, json_option, leave_with, plain, tell_json, wants_json
from trapd.cli.offline import contents_of, file_argument, first_point, read_model, state_of
from trapd.errors import Unreachable
from trapd.setpoint import unit_of

if TYPE_CHECKING:
    from trapd.config.records import Config
    from trapd.guard.model import GuardModel


@click.command(
    "check",
    short_help="What a trap file means, or what is wrong with it.",
    epilog=examples("trapd check trap.toml", "trapd check trap.toml --instruments", "trapd check trap.toml --json"),
)
@file_argument
@click.option(
    "--instruments", is_flag=True, help="Open each instrument, read identity and status; no output is touched."
)
@json_option
def check_command(file: Path, instruments: bool) -> None:
    """Check a trap file and show what it means: setpoints, species, and the verdict at each of its points.

    Exit code 2 and every mistake with its key when the file is wrong.
    """
    config, model = read_model(file)
    answer = _meaning(config, model)
    if instruments:
        from trapd.cli.instruments import identify

        answer["instruments"] = identify(config)
    if wants_json():
        tell_json(answer)
    else:
        from trapd.cli.meaning import show_meaning

        show_meaning(answer)
    silent = [one for one in answer.get("instruments", {}).values() if one["error"] is not None]
    leave_with(Unreachable.exit_code if silent else 0)


def _meaning(config: Config, model: GuardModel) -> dict[str, Any]:
    from trapd.guard.verdict import judge

    everybody = contents_of(config, None)
    return {
        "file": str(config.source),
        "trap": {"name": config.trap.name, "geometry": config.trap.geometry},
        "setpoints": {name: {"unit": unit_of(name), **_limit(limit)} for name, limit in model.limits.items()},
        "resonator": asdict(config.drive.resonator),
        "species": {
            one.name: {"mass_kg": one.mass_kg, "charge_c": one.charge_c, "damping_per_s": one.damping_per_s}
            for one in config.species.values()
        },
        "guard": asdict(config.guard),
        "points": {
            name: plain(judge(model, everybody, state_of(config, model, [], {**first_point(config, model), **point})))
            for name, point in config.points.items()
        },
        "record": str(config.record_file),
    }


def _limit(limit: Any) -> dict[str, float]:
    return {key: getattr(limit, key) for key in ("low", "high", "slew_per_s", "step", "lag_s")}
