"""The simulated rack as the driver tests use it: one in each dialect that the tests have a profile for."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

from trapd_simulated import (
    DcSupplySettings,
    Dialect,
    GaugeSettings,
    PhotonCounterSettings,
    Rack,
    RackSettings,
    RfSourceSettings,
)

HERE = Path(__file__).parent

_OTHER = Dialect(
    addressing="list",
    amplitude_unit="DBM",
    level_factor=2.0,
    replies="header",
    numbers="NR2",
    output_words=True,
    frequency_unit="KHZ",
    measures=False,
    min_spacing_s=0.002,
    reply_end="\r\n",
    error_codes={-222: 701, -113: 702},
)
_THIRD = Dialect(
    addressing="select",
    amplitude_unit="VPP",
    level_factor=2.0,
    replies="unit",
    output_words=True,
    frequency_unit="MHZ",
    frequency_default_unit="KHZ",
)
PLAIN = RackSettings()
OTHER = RackSettings(
    instruments={
        "rf": RfSourceSettings(
            frequency_max_hz=50e6,
            level_min_v=1e-3,
            level_resolution=0.05,
            range_boundaries_v=(0.632,),
            dialect=replace(_OTHER, commands={"level": ("POWer:AMPLitude",), "output": ("SWITch",)}),
        ),
        "dc": DcSupplySettings(dialect=_OTHER),
        "counter": PhotonCounterSettings(dialect=_OTHER),
        "vacuum": GaugeSettings(pressure_mbar=3e-4, dialect=replace(_OTHER, pressure_unit="PA")),
    }
)
THIRD = RackSettings(
    instruments={
        "rf": RfSourceSettings(frequency_resolution_hz=10.0, level_resolution=1e-3, bursts=False, dialect=_THIRD),
        "dc": DcSupplySettings(dialect=_THIRD),
        "counter": PhotonCounterSettings(dialect=_THIRD),
        "vacuum": GaugeSettings(dialect=replace(_THIRD, pressure_unit="TORR")),
    }
)
DIALECTS = {"plain": PLAIN, str(HERE / "other.toml"): OTHER, str(HERE / "third.toml"): THIRD}
"""Settings by the profile that speaks to them."""


def resource(rack: Rack, instrument: str) -> str:
    return f"TCPIP::127.0.0.1::{rack.ports[instrument]}::SOCKET"
