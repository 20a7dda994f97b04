"""A simulated rack: SCPI instruments on loopback ports in front of a bench that obeys its own equations.

It stands in for real hardware, so it imports nothing of the programs it is to test: `trapd` and `trapd_drivers` meet
it only over TCP. Inside a test: ``with Rack() as rack: rack.ports["rf"]``; as a process: ``python -m trapd_simulated``.
"""

from trapd_simulated.bench import Electrodes
from trapd_simulated.clock import Clock, ManualClock, RackClock
from trapd_simulated.control import ask
from trapd_simulated.errors import RackError, RackUseError, SettingsError
from trapd_simulated.faults import Fault, FaultKind
from trapd_simulated.ion import IonState
from trapd_simulated.ion_settings import ElectrodeSettings, IonSettings
from trapd_simulated.rack import Rack
from trapd_simulated.receipts import Received
from trapd_simulated.settings import (
    ChannelSettings,
    DcSupplySettings,
    Dialect,
    GaugeSettings,
    PhotonCounterSettings,
    RackSettings,
    ResonatorSettings,
    RfSourceSettings,
)
from trapd_simulated.settings_file import load

__all__ = [
    "ChannelSettings",
    "Clock",
    "DcSupplySettings",
    "Dialect",
    "ElectrodeSettings",
    "Electrodes",
    "Fault",
    "FaultKind",
    "GaugeSettings",
    "IonSettings",
    "IonState",
    "ManualClock",
    "PhotonCounterSettings",
    "Rack",
    "RackClock",
    "RackError",
    "RackSettings",
    "RackUseError",
    "Received",
    "ResonatorSettings",
    "RfSourceSettings",
    "SettingsError",
    "ask",
    "load",
]
