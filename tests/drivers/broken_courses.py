"""Drivers that break one of the clauses 17 to 25 each: bursts, counts and readings; the key is the clause."""

from __future__ import annotations

import time
from contextlib import suppress

from trapd_drivers.errors import InstrumentRefused
from trapd_drivers.form import Form
from trapd_drivers.interfaces import Instrument
from trapd_drivers.scpi.gauge import ScpiGauge
from trapd_drivers.scpi.photon_counter import ScpiPhotonCounter
from trapd_drivers.scpi.rf_source import ScpiRfSource


class EndsItsBurstsItself(ScpiRfSource):
    """On, and off when it is asked after the time: nobody asks once its process is gone."""

    until_s: float | None = None

    def start_burst(self, duration_s: float) -> None:
        self._encoded(("burst", 0), "duration_s", duration_s)
        try:
            super().set_output(True)
        except InstrumentRefused:
            super().set_output(False)
            raise
        self.until_s = time.monotonic() + duration_s

    def set_output(self, on: bool) -> None:
        self.until_s = None
        super().set_output(on)

    def read_burst(self) -> bool:
        if self.until_s is not None and time.monotonic() > self.until_s:
            self.set_output(False)
        return self.until_s is not None


class WaitsForTheEndOfItsBurst(ScpiRfSource):
    def start_burst(self, duration_s: float) -> None:
        super().start_burst(duration_s)
        time.sleep(min(duration_s, 2.0))


class CutsItsBurstsShort(ScpiRfSource):
    def start_burst(self, duration_s: float) -> None:
        self._encoded(("burst", 0), "duration_s", duration_s)
        super().start_burst(1e-3 * duration_s)


class ClampsItsBursts(ScpiRfSource):
    def start_burst(self, duration_s: float) -> None:
        assert self.burst is not None
        super().start_burst(min(max(self.burst.low, duration_s), self.burst.high))


class SwitchesOnBeforeItBursts(ScpiRfSource):
    def start_burst(self, duration_s: float) -> None:
        duration = self._encoded(("burst", 0), "duration_s", duration_s)
        with self._session.call():
            self._switch_now(True, 0)
            self._session.command(self._dialect.quantities["burst", 0].set, value=duration)
            self._session.command(Form("INIT"))


class StaysInItsBurstMode(ScpiRfSource):
    def set_output(self, on: bool) -> None:
        with self._session.call():
            self._switch_now(on, 0)


class FinishesTheOldBurstFirst(ScpiRfSource):
    def start_burst(self, duration_s: float) -> None:
        self._encoded(("burst", 0), "duration_s", duration_s)
        if not self.read_burst():
            super().start_burst(duration_s)


class WaitsForTheCount(ScpiPhotonCounter):
    def read_count(self) -> int | None:
        while (count := super().read_count()) is None:
            time.sleep(0.01)
        return count


class CountsWhileItStarts(ScpiPhotonCounter):
    def start_count(self, gate_s: float) -> None:
        super().start_count(gate_s)
        time.sleep(gate_s)


class TellsACountOnce(ScpiPhotonCounter):
    told = False

    def start_count(self, gate_s: float) -> None:
        super().start_count(gate_s)
        self.told = False

    def read_count(self) -> int | None:
        count = super().read_count()
        before, self.told = self.told, count is not None
        return None if before else count


class AddsTheOldCount(ScpiPhotonCounter):
    """As if its register were not cleared: what was counted until it was replaced is in the next count."""

    began_s, gate_s, share = 0.0, 0.0, 0.0

    def start_count(self, gate_s: float) -> None:
        now_s = time.monotonic()
        counted_s = now_s - self.began_s
        self.share = counted_s / gate_s if counted_s < self.gate_s else 0.0
        super().start_count(gate_s)
        self.began_s, self.gate_s = now_s, gate_s

    def read_count(self) -> int | None:
        count = super().read_count()
        return None if count is None else int(count * (1.0 + self.share))


class FinishesTheOldCountFirst(ScpiPhotonCounter):
    def start_count(self, gate_s: float) -> None:
        self._encoded(("gate", 0), "gate_s", gate_s)
        if self._started_at is None or self.read_count() is not None:
            super().start_count(gate_s)


class TellsACountItDidNotStart(ScpiPhotonCounter):
    def read_count(self) -> int | None:
        with suppress(InstrumentRefused):
            return super().read_count()
        return 0


class LosesItsMilliseconds(ScpiPhotonCounter):
    """A gate below a second is sent in the wrong unit."""

    def start_count(self, gate_s: float) -> None:
        self._encoded(("gate", 0), "gate_s", gate_s)
        super().start_count(max(1e-3 * gate_s, self.gate.low) if gate_s < 1.0 else gate_s)


class ClampsItsGate(ScpiPhotonCounter):
    def start_count(self, gate_s: float) -> None:
        super().start_count(min(max(self.gate.low, gate_s), self.gate.high))


class RepeatsAStaleNumber(ScpiGauge):
    value: float | None = None

    def read_value(self) -> float:
        self.value = super().read_value() if self.value is None else self.value
        return self.value


class FallsBackOnTheLastNumber(ScpiGauge):
    value = 0.0

    def read_value(self) -> float:
        with suppress(InstrumentRefused):
            self.value = super().read_value()
        return self.value


class TakesNotANumberForANumber(ScpiGauge):
    def read_value(self) -> float:
        try:
            return super().read_value()
        except InstrumentRefused:
            return 9.91e39  # 9.91E37 mbar in Pa


BROKEN_COURSES: tuple[tuple[int, type[Instrument]], ...] = (
    (17, EndsItsBurstsItself),
    (17, WaitsForTheEndOfItsBurst),
    (17, CutsItsBurstsShort),
    (18, ClampsItsBursts),
    (19, SwitchesOnBeforeItBursts),
    (20, StaysInItsBurstMode),
    (20, FinishesTheOldBurstFirst),
    (21, WaitsForTheCount),
    (21, CountsWhileItStarts),
    (22, TellsACountOnce),
    (23, AddsTheOldCount),
    (23, FinishesTheOldCountFirst),
    (23, TellsACountItDidNotStart),
    (24, LosesItsMilliseconds),
    (24, ClampsItsGate),
    (25, RepeatsAStaleNumber),
    (25, FallsBackOnTheLastNumber),
    (25, TakesNotANumberForANumber),
)
