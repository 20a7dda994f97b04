"""The rack: builds instruments and bench from settings, serves them, and lets a test reach behind the wire."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path
from types import TracebackType
from typing import Any, Self

from trapd_simulated.bench import Bench, Electrodes
from trapd_simulated.clock import Clock, RackClock
from trapd_simulated.dc_supply import DcSupply
from trapd_simulated.errors import RackError, RackUseError
from trapd_simulated.faults import Fault, FaultKind, fault_kind
from trapd_simulated.instrument import Instrument
from trapd_simulated.receipts import Receipts, Received
from trapd_simulated.rf_source import RfSource
from trapd_simulated.server import InstrumentServer
from trapd_simulated.settings import DcSupplySettings, InstrumentSettings, RackSettings, RfSourceSettings


class Rack:
    """All instruments of ``settings`` on loopback ports, between `start` and `stop` (or as a context manager).

    ``seed`` fixes readback biases and noise; ``speed`` is rack seconds per second of the host; ``on_receive`` is called
    with each message before it is executed, in the thread that serves its connection; ``log`` is a file that each
    message is appended to. Methods may be called from any thread; wrong names raise `RackUseError` and change nothing.
    """

    def __init__(
        self,
        settings: RackSettings | None = None,
        *,
        seed: int = 0,
        speed: float = 1.0,
        on_receive: Callable[[Received], None] | None = None,
        log: Path | None = None,
        clock: Clock | None = None,
    ) -> None:
        self.settings = settings or RackSettings()
        self.seed = seed
        self.speed = speed
        self.clock = clock or RackClock(speed)
        self._receipts = Receipts(on_receive, log)
        self._instruments = {
            name: _instrument(name, one, self.clock, seed) for name, one in self.settings.instruments.items()
        }
        self._bench = Bench(self.settings.resonator, self._instruments, self.clock)
        self._servers = {
            name: InstrumentServer(one, self._receipts, one.settings.port) for name, one in self._instruments.items()
        }

    def start(self) -> None:
        """Listen on every port. `RackError` when one is taken; then none is left open."""
        for name, server in self._servers.items():
            try:
                server.open()
            except (OSError, OverflowError) as error:
                self.stop()
                raise RackError(f"{name}: port {server.port}: {error}; the rack was not started") from error

    def stop(self) -> None:
        """Close all ports and connections. May be called twice."""
        for server in self._servers.values():
            server.shut()
            server.drop()
        self._receipts.close()

    def __enter__(self) -> Self:
        self.start()
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        self.stop()

    @property
    def ports(self) -> dict[str, int]:
        return {name: server.port for name, server in self._servers.items()}

    def describe(self) -> dict[str, Any]:
        """Port and kind of each instrument, and the rack's speed."""
        kinds = {name: one.settings.KIND for name, one in self._instruments.items()}
        instruments = {name: {"port": port, "kind": kinds[name]} for name, port in self.ports.items()}
        return {"instruments": instruments, "speed": self.speed}

    @property
    def received(self) -> list[Received]:
        """Every message so far (the last 200,000 of them), in order of arrival over the whole rack."""
        return self._receipts.after(0)

    def received_after(self, count: int) -> list[Received]:
        """Those with index ``count`` and up."""
        return self._receipts.after(count)

    def electrodes(self, t: float | None = None) -> Electrodes:
        """The truth at rack time ``t`` in s, now when not given."""
        return self._bench.electrodes(t)

    def inject(self, instrument: str, fault: Fault | FaultKind | str) -> None:
        """Let a fault stand at ``instrument``; a bare kind stands until cleared."""
        one = fault if isinstance(fault, Fault) else Fault(kind=fault_kind(fault))
        self._instrument(instrument).inject(one)
        if one.kind is FaultKind.REFUSE_CONNECTIONS:
            self._servers[instrument].shut()

    def clear(self, instrument: str, kind: FaultKind | str | None = None) -> None:
        """End one kind of fault, or all, at ``instrument``."""
        one = self._instrument(instrument)
        one.faults.clear(fault_kind(kind) if kind is not None else None)
        if one.powered and not one.faults.standing(FaultKind.REFUSE_CONNECTIONS):
            self._servers[instrument].open()

    def front_panel(self, instrument: str, command_text: str) -> str | None:
        """Do by hand what ``command_text`` says; its answer. `RackUseError` when the instrument refuses it."""
        return self._instrument(instrument).front_panel(command_text)

    def power_off(self, instrument: str) -> None:
        """Output and settings are lost, connections closed, new ones refused."""
        self._instrument(instrument).power_off()
        self._servers[instrument].shut()
        self._servers[instrument].drop()

    def power_on(self, instrument: str) -> None:
        """Back with power-on settings, output off, and the power-on event set."""
        one = self._instrument(instrument)
        one.power_on()
        if not one.faults.standing(FaultKind.REFUSE_CONNECTIONS):
            self._servers[instrument].open()

    def power_cycle(self, instrument: str, seconds: float = 0.0) -> None:
        """Off, ``seconds`` of rack time, on; returns when it is on again."""
        self.power_off(instrument)
        time.sleep(self.clock.host_s(seconds))
        self.power_on(instrument)

    def _instrument(self, name: str) -> Instrument:
        try:
            return self._instruments[name]
        except KeyError:
            raise RackUseError(f"no instrument {name!r}: there are {', '.join(self._instruments)}") from None


def _instrument(name: str, settings: InstrumentSettings, clock: Clock, seed: int) -> Instrument:
    if isinstance(settings, RfSourceSettings):
        return RfSource(name, settings, clock, seed)
    assert isinstance(settings, DcSupplySettings)
    return DcSupply(name, settings, clock, seed)
