"""What a trap file means, for people: the tables of ``trapd check``."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from trapd.cli.amounts import amount, duration, number, value_of
from trapd.cli.terminal import BAD, GOOD, STRONG, say, say_parts, table
from trapd.cli.verdicts import show_reasons, show_species
from trapd.physics.species import ATOMIC_MASS_KG, ELEMENTARY_CHARGE_C


def show_meaning(answer: Mapping[str, Any]) -> None:
    trap = answer["trap"]
    say_parts((trap["name"], STRONG), (f"  {trap['geometry']} trap, {answer['file']}", ""))
    say(f"record: {answer['record']}")
    say()
    _show_setpoints(answer["setpoints"])
    say(_resonator(answer["resonator"]))
    say(_guard(answer["guard"]))
    say()
    _show_species(answer["species"])
    for name, verdict in answer["points"].items():
        say()
        _show_point(name, verdict)
    if "instruments" in answer:
        say()
        _show_instruments(answer["instruments"])


def _show_setpoints(setpoints: Mapping[str, Any]) -> None:
    columns = ("setpoint", ">min", ">max", ">slew", ">step", ">lag")
    rows = [
        (
            name,
            value_of(name, one["low"]),
            value_of(name, one["high"]),
            f"{amount(one['slew_per_s'], one['unit'])}/s",
            value_of(name, one["step"]),
            duration(one["lag_s"]) if one["lag_s"] else "-",
        )
        for name, one in setpoints.items()
    ]
    table(columns, rows)


def _resonator(resonator: Mapping[str, Any]) -> str:
    gain = f"{resonator['gain']:g} V/V ± {_percent(resonator['gain_uncertainty'])}"
    most = "" if resonator["level_max_v"] is None else f", synthesizer at most {amount(resonator['level_max_v'], 'V')}"
    if resonator["loaded_q"] is None:
        return f"drive: flat gain {gain}{most}; its frequency stays fixed while ions are held"
    center = amount(resonator["center_hz"], "Hz", 9)
    return f"drive: resonator at {center}, loaded Q {resonator['loaded_q']:g}, gain {gain}{most}"


def _guard(guard: Mapping[str, Any]) -> str:
    parts = [f"margin {_percent(guard['margin'])}"]
    if guard["min_secular_frequency_hz"] is not None:
        parts.append(f"secular frequencies from {amount(guard['min_secular_frequency_hz'], 'Hz')}")
    if guard["min_depth_ev"] is not None:
        parts.append(f"depth from {amount(guard['min_depth_ev'], 'eV')}")
    return f"guard: {', '.join(parts)}"


def _percent(share: float) -> str:
    return f"{number(share * 100)} %"


def _show_species(species: Mapping[str, Any]) -> None:
    rows = [
        (
            name,
            _mass(one["mass_kg"]),
            f"{number(one['charge_c'] / ELEMENTARY_CHARGE_C)} e",
            f"{number(one['damping_per_s'])} /s" if one["damping_per_s"] else "-",
        )
        for name, one in species.items()
    ]
    table(("species", ">mass", ">charge", ">damping"), rows)


def _mass(mass_kg: float) -> str:
    """An ion's in u, a grain's in kg."""
    mass_u = mass_kg / ATOMIC_MASS_KG
    return f"{number(mass_u, 9)} u" if mass_u < 1e4 else f"{number(mass_kg)} kg"


def _show_point(name: str, verdict: Mapping[str, Any]) -> None:
    word = ("accepted", GOOD) if verdict["accepted"] else ("refused", BAD)
    values = ", ".join(f"{setpoint} {value_of(setpoint, value)}" for setpoint, value in verdict["values"].items())
    say_parts((f"point {name}: ", STRONG), word, (f"  {values}", ""))
    show_reasons(verdict["reasons"], verdict["values"])
    show_species(verdict["species"])


def _show_instruments(instruments: Mapping[str, Any]) -> None:
    rows = [(name, one["resource"], *_instrument(one)) for name, one in instruments.items()]
    table(("instrument", "resource", "answers", "status"), rows, wrapping=2)


def _instrument(one: Mapping[str, Any]) -> tuple[str, str]:
    if one["error"] is not None:
        return "no", one["error"]
    identity, status = one["identity"], one["status"]
    who = " ".join(identity[key] for key in ("manufacturer", "model", "serial", "firmware"))
    notes = ["simulated"] if identity["simulated"] else []
    notes += ["was switched on since last asked"] if status["power_on"] else []
    notes += [f"error {code} {text}" for code, text in status["errors"]]
    notes += [f"output {output} tripped" for output in status["tripped"]]
    return who, ", ".join(notes) or "clean"
