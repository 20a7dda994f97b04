"""The rack: builds instruments and bench from settings, serves them, and lets a test reach behind the wire."""

from __future__ import annotations

import threading
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
from trapd_simulated.gauge import Gauge
from trapd_simulated.instrument import Instrument
from trapd_simulated.ion import Ion, IonState
from trapd_simulated.photon_counter import PhotonCounter
from trapd_simulated.receipts import Receipts, Received
from trapd_simulated.rf_source import RfSource
from trapd_simulated.server import InstrumentServer
from trapd_simulated.settings import (
    DcSupplySettings,
    GaugeSettings,
    InstrumentSettings,
    PhotonCounterSettings,
    RackSettings,
    RfSourceSettings,
)

_AXES = ("x", "y", "z")
_KEEP_UP_S = 0.1  # of the host, between two looks at what became of the ion


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
        self._ion = self._placed_ion()
        self._stopping = threading.Event()
        self._servers = {
            name: InstrumentServer(one, self._receipts, one.settings.port) for name, one in self._instruments.items()
        }

    def _placed_ion(self) -> Ion | None:
        """The ion among the electrodes, seen by every counter."""
        if self.settings.ion is None:
            return None
        ion = Ion(self.settings.ion, self._bench, self.clock.now_s(), self.seed)
        for one in self._instruments.values():
            if isinstance(one, PhotonCounter):
                one.watch = ion.watch
        return ion

    def start(self) -> None:
        """Listen on every port. `RackError` when one is taken; then none is left open."""
        for name, server in self._servers.items():
            try:
                server.open()
            except (OSError, OverflowError) as error:
                self.stop()
                raise RackError(f"{name}: port {server.port}: {error}; the rack was not started") from error
        if self._ion:
            self._stopping.clear()
            threading.Thread(target=self._keep_up, args=(self._ion,), name="ion", daemon=True).start()

    def _keep_up(self, ion: Ion) -> None:
        while not self._stopping.wait(_KEEP_UP_S):
            ion.keep_up(self.clock.now_s())

    def stop(self) -> None:
        """Close all ports and connections. May be called twice."""
        self._stopping.set()
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
        """Port and kind of each instrument, the rack's speed, and whether there is an ion."""
        kinds = {name: one.settings.KIND for name, one in self._instruments.items()}
        instruments = {name: {"port": port, "kind": kinds[name]} for name, port in self.ports.items()}
        ion = self._ion is not None and self.ion_state().present
        return {"instruments": instruments, "speed": self.speed, "ion": ion}

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
        if self._ion:  # a rack that was not started has nobody else who follows the ion from change to change
            self._ion.keep_up(self.clock.now_s())
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

    def load_ion(self) -> None:
        """An ion near the centre, in place of any other; where the trap does not hold, it is lost in milliseconds."""
        self._need_ion().load(self.clock.now_s())

    def lose_ion(self) -> None:
        """Take the ion out; nothing happens when there is none."""
        self._need_ion().lose(self.clock.now_s())

    def ion_state(self) -> IonState:
        """The ion now: whether it is there, how it moves, when and why the last one was lost."""
        return self._need_ion().state(self.clock.now_s())

    def spectrum(self, mode_axis: str) -> float:
        """The truth of a scan: the strongest line, Hz, of the orbit of an ion displaced along "x", "y" or "z" as
        things are now, neither cooled nor excited; NaN when such an orbit is not held.
        """
        if mode_axis not in _AXES:
            raise RackUseError(f"no axis {mode_axis!r}: there are {', '.join(_AXES)}")
        return self._need_ion().line_hz(_AXES.index(mode_axis), self.clock.now_s())

    def _need_ion(self) -> Ion:
        if self._ion is None:
            raise RackUseError("the settings of this rack say that there is no ion; nothing was changed")
        return self._ion

    def set_pressure(self, instrument: str, pressure_mbar: float | None) -> None:
        """The true pressure at a gauge from now on, mbar; None: its sensor is off."""
        gauge = self._instrument(instrument)
        if not isinstance(gauge, Gauge):
            raise RackUseError(f"{instrument} is no gauge; nothing was changed")
        gauge.set_pressure(pressure_mbar)

    def _instrument(self, name: str) -> Instrument:
        try:
            return self._instruments[name]
        except KeyError:
            raise RackUseError(f"no instrument {name!r}: there are {', '.join(self._instruments)}") from None


def _instrument(name: str, settings: InstrumentSettings, clock: Clock, seed: int) -> Instrument:
    if isinstance(settings, RfSourceSettings):
        return RfSource(name, settings, clock, seed)
    if isinstance(settings, DcSupplySettings):
        return DcSupply(name, settings, clock, seed)
    if isinstance(settings, PhotonCounterSettings):
        return PhotonCounter(name, settings, clock, seed)
    assert isinstance(settings, GaugeSettings)
    return Gauge(name, settings, clock, seed)
