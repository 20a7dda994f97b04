"""The worked cases of reference_cases.json (computed with 25 to 40 digits by other methods), as traps, species and points."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np

from trapd.physics.point import Point
from trapd.physics.species import Species
from trapd.physics.trap import Electrode, Trap, linear, ring, tensor

CASES: list[dict[str, Any]] = json.loads(Path(__file__).with_name("reference_cases.json").read_text())["cases"]
SETPOINTS = {"V_rf_V": "drive.amplitude", "f_rf_Hz": "drive.frequency", "rf_scale": "drive.amplitude"}
HOLD_V_PER_M2 = 1e6  # keeps the third axis of the plane cases at rest


def of_kind(*kinds: str) -> list[dict[str, Any]]:
    return [case for case in CASES if case["kind"] in kinds]


def species_of(inputs: dict[str, Any]) -> list[Species]:
    given = inputs["species"] if isinstance(inputs["species"], list) else [inputs["species"]]
    damping = inputs.get("damping_per_s", 0.0)
    return [
        Species(name=one["name"], mass_kg=one["mass_kg"], charge_c=one["charge_C"], damping_per_s=damping)
        for one in given
    ]


def trap_of(kind: str, inputs: dict[str, Any]) -> tuple[Trap, Point]:
    """The trap, and the case's point; the searched setpoint, which a case leaves open, stands at an arbitrary value."""
    if kind.startswith("tensor"):
        return _tensor(inputs)
    given = inputs["trap"]
    size = {"r0_m": given["r0_m"], "z0_m": given["z0_m"]}
    if kind.startswith("ring"):
        trap = ring(**size, electrodes={"U_dc_V": Electrode(kind="ring")})
    else:
        electrodes = {"U_r_V": Electrode(kind="rods"), "U_ec_V": Electrode(kind="endcap")}
        phases = 2 if given.get("drive") == "two-phase" else 1
        trap = linear(**size, kappa=given["kappa"], phases=phases, electrodes=electrodes)
    peak = 2**0.5 if given.get("V_convention") == "rms" else 1.0
    return trap, Point(
        frequency_hz=given.get("f_rf_Hz", 1e7),
        amplitude_v=peak * given.get("V_rf_V", 100.0),
        electrodes={name: given.get(name, 0.0) for name in trap.electrode_curvature},
    )


def _tensor(inputs: dict[str, Any]) -> tuple[Trap, Point]:
    static, driven = np.array(inputs["H_dc_V_per_m2"]), np.array(inputs["H_rf_cos_V_per_m2"])
    if len(static) == 2:
        static, driven = np.pad(static, (0, 1)), np.pad(driven, (0, 1))
        static[2, 2] = HOLD_V_PER_M2
    trap = tensor(drive_curvature=driven, electrodes={"dc": Electrode(curvature=static)})
    return trap, Point(frequency_hz=inputs["f_rf_Hz"], amplitude_v=1.0, electrodes={"dc": 1.0})
