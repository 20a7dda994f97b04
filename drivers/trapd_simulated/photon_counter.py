"""A photon counter: a gate is opened by INITiate and closes by itself; its count is drawn when it is asked for."""

from __future__ import annotations

from collections.abc import Callable
from typing import ClassVar

from numpy.random import default_rng

from trapd_simulated.arguments import scales
from trapd_simulated.clock import Clock
from trapd_simulated.dialect import integer_reply, number_reply
from trapd_simulated.errors import RackUseError, ScpiError
from trapd_simulated.faults import FaultKind
from trapd_simulated.gate import Gate
from trapd_simulated.instrument import Call, Instrument, Query, Set
from trapd_simulated.settings import PhotonCounterSettings

_MEASURING = 16  # bit 4 of the operation status, SCPI-1999 volume 1, 20.1


class PhotonCounter(Instrument):
    """Each INITiate gives a new `Gate` to ``watch``, which fills it with the photons to expect."""

    settings: PhotonCounterSettings
    PATTERNS: ClassVar = {
        "gate": ("[SENSe#]:TOTalize:GATE:TIME",),
        "initiate": ("INITiate[:IMMediate]",),
        "abort": ("ABORt",),
        "fetch": ("FETCh",),
        "condition": ("STATus:OPERation:CONDition",),
    }

    def __init__(self, name: str, settings: PhotonCounterSettings, clock: Clock, seed: int) -> None:
        super().__init__(name, settings, clock, seed)
        self.watch: Callable[[Gate], None] = lambda gate: None
        self._counts = default_rng(self.random.getrandbits(64))
        self._preset()

    def _preset(self) -> None:
        self._gate_s = self.settings.gate_min_s
        self._gate: Gate | None = None
        self._count: int | None = None

    def commands(self) -> dict[str, tuple[Set | None, Query | None]]:
        return {
            "gate": (self._set_gate, self._read_gate),
            "initiate": (self._initiate, None),
            "abort": (self._abort, None),
            "fetch": (None, self._fetch),
            "condition": (None, lambda call: str(_MEASURING if self._counting(call.now_s) else 0)),
        }

    def advance(self, now_s: float) -> None:
        """A gate closes by itself; nobody need see it."""

    def reset(self, now_s: float) -> None:
        self._drop()
        self._preset()

    def trip(self, channel: int) -> None:
        raise RackUseError(f"{self.name} has no output; nothing tripped")

    def _counting(self, now_s: float) -> bool:
        return self._gate is not None and now_s < self._gate.end_s

    def _set_gate(self, call: Call) -> None:
        low, high = self.settings.gate_min_s, self.settings.gate_max_s
        value = call.arguments.quantity(scales("S"), low, high, "S")
        self._end(call)
        self._gate_s = value

    def _read_gate(self, call: Call) -> str:
        extreme = call.arguments.extreme(self.settings.gate_min_s, self.settings.gate_max_s)
        self._end(call)
        return number_reply(self.dialect, "TOT:GATE:TIME", "S", self._gate_s if extreme is None else extreme)

    def _initiate(self, call: Call) -> None:
        self._end(call)
        self._drop()
        self._gate = Gate(start_s=call.now_s, end_s=call.now_s + self._gate_s)
        self.watch(self._gate)

    def _abort(self, call: Call) -> None:
        self._end(call)
        if self._counting(call.now_s):
            self._drop()

    def _drop(self) -> None:
        """A count never survives the start or the end of another."""
        if self._gate:
            self._gate.dropped = True
        self._gate = self._count = None

    def _fetch(self, call: Call) -> str:
        self._end(call)
        if self._gate is None or self._counting(call.now_s):
            raise ScpiError(-230, "counting" if self._gate else "nothing was counted")
        if self._count is None:
            self._count = int(self._counts.poisson(self._gate.expected()))
        offset = self._fault(FaultKind.READBACK_OFFSET)
        return integer_reply(self.dialect, "FETC", self._count + (int(offset.value) if offset else 0))

    @staticmethod
    def _end(call: Call) -> None:
        call.arguments.done()
        if call.suffix != 1:
            raise ScpiError(-114, "one input")
