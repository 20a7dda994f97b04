"""Who answers at the addresses of a trap file. Opens, asks, closes; no output and no setting is touched."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

from trapd.config.build import guard_of
from trapd.config.records import Config, InstrumentSection
from trapd.errors import ConfigError, Locked
from trapd.instrument_lock import InstrumentLocks
from trapd.wiring import Wiring
from trapd_drivers.errors import DriverError, ProfileError
from trapd_drivers.interfaces import Instrument
from trapd_drivers.registry import open_instrument, scales_of


def identify(config: Config) -> dict[str, Any]:
    """By instrument: ``driver, resource, identity, status, error``. `Locked` when a daemon (or anybody) owns one.

    When all of them answer, file and instruments are also compared: channels, ranges, resolutions (`ConfigError`).
    """
    if not config.instruments:
        raise ConfigError(f"{config.source}: [instruments] is missing; nothing was opened")
    try:
        locks = InstrumentLocks(one.resource for one in config.instruments.values())
    except Locked as error:
        raise Locked(f"{error.message}. `trapd status` asks the daemon that owns it", error.details) from error
    opened: dict[str, Instrument] = {}
    with locks:
        try:
            found = {name: _ask(name, section, config, opened) for name, section in config.instruments.items()}
            if len(opened) == len(config.instruments):
                guard_of(config, Wiring(config, opened).scales)
        finally:
            for instrument in opened.values():
                instrument.close()
    return found


def _ask(name: str, section: InstrumentSection, config: Config, opened: dict[str, Instrument]) -> dict[str, Any]:
    answer: dict[str, Any] = {"driver": section.driver, "resource": section.resource}
    try:
        instrument = open_instrument(
            section.driver, section.resource, profile=section.profile, timeout_s=section.timeout_s
        )
        opened[name] = instrument
        identity, status = instrument.read_identity(), instrument.read_status()
    except ProfileError as error:
        raise ConfigError(f"{config.source}: instruments.{name}: {error}") from error
    except DriverError as error:
        if name in opened:
            opened.pop(name).close()
        return {**answer, "identity": None, "status": None, "error": str(error)}
    return {**answer, "identity": asdict(identity), "status": asdict(status), "error": None}


def require_drivers(config: Config) -> None:
    """Every driver is registered and every dialect profile can be read; nothing is opened."""
    for name, section in config.instruments.items():
        try:
            scales_of(section.driver, section.profile)
        except ProfileError as error:
            raise ConfigError(f"{config.source}: instruments.{name}: {error}") from error
