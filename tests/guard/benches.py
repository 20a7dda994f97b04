"""The guard's models of the project's trap files, and small ways to change them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from math import pi
from pathlib import Path
from typing import TypeVar

from tests.traps import NORTH_BENCH, RING, TENSOR
from trapd.config.build import guard_of
from trapd.config.read import parse
from trapd.guard.model import GuardModel
from trapd.physics.species import Species
from trapd.setpoint import AMPLITUDE, FREQUENCY, Contents, Verdict

One = TypeVar("One")

FILE = Path("/bench/trap.toml")
NORTH = guard_of(parse(NORTH_BENCH, FILE))
SOUTH = guard_of(parse(RING, FILE))
TILTED = guard_of(parse(TENSOR, FILE))

NORTH_WORK = {FREQUENCY: 21e6, AMPLITUDE: 260.0, "endcaps": 120.0, "rods": 1.0, "shim_x": 0.0}
SOUTH_WORK = {FREQUENCY: 15e6, AMPLITUDE: 300.0, "bias": 0.0}
TILTED_WORK = {FREQUENCY: 1100.0, AMPLITUDE: 500.0, "top": 0.0}

CALCIUM = Contents(presence="held", ions={"40Ca+": 1})
NONE = Contents(presence="none")

FIRST_EDGE_Q = 0.908046333734577594
"""End of the first region at a = 0 (McLachlan, Theory and Application of Mathieu Functions [mem])."""


def held(*names: str) -> Contents:
    return Contents(presence="held", ions=dict.fromkeys(names, 1))


def wide(model: GuardModel, **limits: tuple[float, float]) -> GuardModel:
    """The same model with other ranges; the amplitude is ``amplitude``, the frequency ``frequency``."""
    names = {"amplitude": AMPLITUDE, "frequency": FREQUENCY}
    changed = {
        names.get(name, name): replace(model.limits[names.get(name, name)], low=low, high=high)
        for name, (low, high) in limits.items()
    }
    return replace(model, limits={**model.limits, **changed})


def with_limit(model: GuardModel, setpoint: str, **changes: object) -> GuardModel:
    return replace(model, limits={**model.limits, setpoint: replace(model.limits[setpoint], **changes)})  # type: ignore[arg-type]


def exact(model: GuardModel) -> GuardModel:
    """Without uncertainty and without the file's own rules."""
    resonator = replace(model.resonator, gain_uncertainty=0.0, center_uncertainty_hz=0.0)
    return replace(model, resonator=resonator, min_secular_frequency_hz=None, min_depth_ev=None)


def ring_amplitude_at(q: float, species: Species, frequency_hz: float) -> float:
    """Volts of the south ring at ``q_z``: |q_z| = 8 Q V/(m (r0^2 + 2 z0^2) Omega^2)
    (March 1997, J. Mass Spectrom. 32, 351 [mem])."""
    size = 0.70e-3**2 + 2 * 0.50e-3**2
    return q * species.mass_kg * size * (2 * pi * frequency_hz) ** 2 / (8 * species.charge_c)


def rules_of(verdict: Verdict) -> list[str]:
    return [reason.rule for reason in verdict.reasons]


def only(items: Sequence[One]) -> One:
    (item,) = items
    return item
