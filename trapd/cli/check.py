"""``trapd check``: what a trap file means, and with --instruments whether its instruments answer."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import Any

import click

from trapd.cli.amounts import amount, duration, millivolts, number, rate, value_of
from trapd.cli.answer import Data, tell
from trapd.cli.options import command, file_argument
from trapd.cli.terminal import BAD, GOOD, STRONG, say, table
from trapd.cli.verdicts import show_reasons, show_species
from trapd.errors import Unreachable
from trapd.physics.species import ATOMIC_MASS_KG, ELEMENTARY_CHARGE_C
from trapd.setpoint import unit_of

_LIMIT = ("low", "high", "slew_per_s", "step", "lag_s")
_SPECIES = ("mass_kg", "charge_c", "damping_per_s")


@command("trapd check trap.toml", "trapd check trap.toml --instruments", "trapd check trap.toml --json")
@file_argument
@click.option(
    "--instruments", is_flag=True, help="Open each instrument, read identity and status; no output is touched."
)
def check_command(file: Path, instruments: bool) -> None:
    """What a trap file means, or what is wrong with it. Setpoints, species, and the verdict at each of its points.

    Exit code 2 and every mistake with its key when the file is wrong.
    """
    from trapd.cli.instruments import require_drivers
    from trapd.cli.offline import contents_of, first_point, read_model, state_of
    from trapd.guard.verdict import judge

    config, model = read_model(file)
    require_drivers(config)
    everybody = contents_of(config, None)
    first = first_point(config, model)
    states = {name: state_of(config, model, [], {**first, **point}) for name, point in config.points.items()}
    answer: dict[str, Any] = {
        "file": str(config.source),
        "trap": {"name": config.trap.name, "geometry": config.trap.geometry},
        "setpoints": {name: {"unit": unit_of(name), **_some(one, _LIMIT)} for name, one in model.limits.items()},
        "resonator": asdict(config.drive.resonator),
        "species": {one.name: _some(one, _SPECIES) for one in config.species.values()},
        "guard": asdict(config.guard),
        "points": {name: asdict(judge(model, everybody, state)) for name, state in states.items()},
        "tickle": config.tickle and asdict(config.tickle),
        "counter": config.counter and asdict(config.counter),
        "scans": {name: asdict(one) for name, one in config.scans.items()},
        "schedule": [asdict(one) for one in config.schedule],
        "interlocks": {name: asdict(one) for name, one in config.interlocks.items()},
        "record": str(config.record_file),
    }
    if instruments:
        from trapd.cli.instruments import identify

        answer["instruments"] = identify(config)
    silent = [one for one in answer.get("instruments", {}).values() if one["error"] is not None]
    tell(answer, _show, exit_code=Unreachable.exit_code if silent else 0)


def _some(record: object, names: tuple[str, ...]) -> dict[str, Any]:
    return {name: getattr(record, name) for name in names}


def _show(answer: Data) -> None:
    trap = answer["trap"]
    say((trap["name"], STRONG), f"  {trap['geometry']} trap, {answer['file']}")
    say(f"record: {answer['record']}")
    say()
    rows = [_setpoint_row(name, one) for name, one in answer["setpoints"].items()]
    table(("setpoint", ">min", ">max", ">slew", ">step", ">lag"), rows)
    say(_resonator(answer["resonator"]))
    say(_guard(answer["guard"]))
    say()
    rows = [_species_row(name, one) for name, one in answer["species"].items()]
    table(("species", ">mass", ">charge", ">damping"), rows)
    for name, verdict in answer["points"].items():
        say()
        _show_point(name, verdict)
    _show_scans(answer)
    _show_interlocks(answer)
    if "instruments" in answer:
        say()
        rows = [(name, one["resource"], *_answers(one)) for name, one in answer["instruments"].items()]
        table(("instrument", "resource", "answers", "status"), rows, wrapping=2)


def _setpoint_row(name: str, one: Data) -> tuple[str, ...]:
    slew = f"{amount(one['slew_per_s'], one['unit'])}/s"
    low, high, step = (value_of(name, one[key]) for key in ("low", "high", "step"))
    return name, low, high, slew, step, duration(one["lag_s"]) if one["lag_s"] else "-"


def _species_row(name: str, one: Data) -> tuple[str, ...]:
    """The mass of an ion in u, of a grain in kg."""
    mass_u = one["mass_kg"] / ATOMIC_MASS_KG
    mass = f"{number(mass_u, 9)} u" if mass_u < 1e4 else f"{number(one['mass_kg'])} kg"
    damping = f"{number(one['damping_per_s'])} /s" if one["damping_per_s"] else "-"
    return name, mass, f"{number(one['charge_c'] / ELEMENTARY_CHARGE_C)} e", damping


def _resonator(resonator: Data) -> str:
    gain = f"{resonator['gain']:g} V/V ± {_percent(resonator['gain_uncertainty'])}"
    most = "" if resonator["level_max_v"] is None else f", synthesizer at most {amount(resonator['level_max_v'], 'V')}"
    if resonator["loaded_q"] is None:
        return f"drive: flat gain {gain}{most}; its frequency stays fixed while ions are held"
    center = amount(resonator["center_hz"], "Hz", 9)
    return f"drive: resonator at {center}, loaded Q {resonator['loaded_q']:g}, gain {gain}{most}"


def _guard(guard: Data) -> str:
    parts = [f"margin {_percent(guard['margin'])}"]
    if guard["min_secular_frequency_hz"] is not None:
        parts.append(f"secular frequencies from {amount(guard['min_secular_frequency_hz'], 'Hz')}")
    if guard["min_depth_ev"] is not None:
        parts.append(f"depth from {amount(guard['min_depth_ev'], 'eV')}")
    return f"guard: {', '.join(parts)}"


def _percent(share: float) -> str:
    return f"{number(share * 100)} %"


def _show_point(name: str, verdict: Data) -> None:
    word = ("accepted", GOOD) if verdict["accepted"] else ("refused", BAD)
    values = ", ".join(f"{setpoint} {value_of(setpoint, value)}" for setpoint, value in verdict["values"].items())
    say((f"point {name}: ", STRONG), word, f"  {values}")
    show_reasons(verdict["reasons"], verdict["values"])
    show_species(verdict["species"])


def _show_scans(answer: Data) -> None:
    if answer["scans"]:
        say()
        columns = ("scan", "mode", ">tickle", ">span", ">width", ">dwell", ">target", ">passes", ">contrast from")
        table(columns, [_scan_row(one) for one in answer["scans"].values()])
        tickle, counter = answer["tickle"], answer["counter"]
        say(f"tickle at most {millivolts(tickle['level_max_v'])}, none below {rate(counter['floor_per_s'])} counted")
    if answer["schedule"]:
        say()
        table(("due", "scan", "cron (UTC)"), [(one["name"], one["scan"], one["cron"]) for one in answer["schedule"]])


def _show_interlocks(answer: Data) -> None:
    if answer["interlocks"]:
        say()
        levels = ("warn_below", "trip_below", "warn_above", "trip_above")
        columns = ("interlock", "gauge", *(f">{one.replace('_', ' ')}" for one in levels), ">for", "action")
        table(columns, [_interlock_row(one, levels) for one in answer["interlocks"].values()])


def _interlock_row(one: Data, levels: tuple[str, ...]) -> tuple[str, ...]:
    pressures = ("-" if one[level] is None else f"{one[level]:.3g} Pa" for level in levels)
    return one["name"], one["instrument"], *pressures, duration(one["for_s"]), one["action"]


def _scan_row(one: Data) -> tuple[str, ...]:
    mode = f"{one['mode']} of {one['species'] or 'what is held'}"
    hertz = (amount(one[key], "Hz") for key in ("span_hz", "width_hz"))
    ends = amount(one["target_hz"], "Hz"), str(one["passes"]), _percent(one["min_contrast"])
    return one["name"], mode, millivolts(one["tickle_v"]), *hertz, duration(one["dwell_s"]), *ends


def _answers(one: Data) -> tuple[str, str]:
    """Who answers there, and how it is."""
    if one["error"] is not None:
        return "no", one["error"]
    identity, status = one["identity"], one["status"]
    who = " ".join(identity[key] for key in ("manufacturer", "model", "serial", "firmware"))
    notes = ["simulated"] if identity["simulated"] else []
    notes += ["was switched on since last asked"] if status["power_on"] else []
    notes += [f"error {code} {text}" for code, text in status["errors"]]
    notes += [f"output {output} tripped" for output in status["tripped"]]
    return who, ", ".join(notes) or "clean"
