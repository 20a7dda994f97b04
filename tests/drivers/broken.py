"""Drivers that break one of the clauses 1 to 16 each, as a hurried author might; the key is the clause."""

from __future__ import annotations

import itertools
import math
import threading
import time
from contextlib import suppress
from typing import Any, ClassVar, Self

from trapd_drivers.errors import InstrumentRefused, Unreachable
from trapd_drivers.interfaces import Identity, Instrument, Status
from trapd_drivers.scpi.dc_supply import ScpiDcSupply
from trapd_drivers.scpi.rf_source import ScpiRfSource


class OnlyInItsFirstThread(ScpiRfSource):
    home: ClassVar[int | None] = None

    @classmethod
    def open(cls, resource: str, *, profile: str = "plain", timeout_s: float = 1.0) -> Self:
        cls.home = cls.home or threading.get_ident()
        if threading.get_ident() != cls.home:
            raise RuntimeError("signal only works in the main thread")
        return super().open(resource, profile=profile, timeout_s=timeout_s)


class TriesAgainOnItsOwn(ScpiRfSource):
    def read_level_v(self) -> float:
        try:
            return super().read_level_v()
        except Unreachable:
            time.sleep(1.0)
            return super().read_level_v()


class TrustsWhoeverAnswers(ScpiRfSource):
    def __init__(self, *arguments: Any) -> None:
        super().__init__(*arguments)
        link: Any = self._session._link
        link.read_identity = lambda **_: link.ask("*IDN?")


class KeepsALateReply(ScpiRfSource):
    """After a timeout of its own, well before the link's, it goes on with the same connection."""

    def __init__(self, *arguments: Any) -> None:
        super().__init__(*arguments)
        link: Any = self._session._link
        receive, drop, late = link._receive_some, link._drop, []
        own_timeout_s, link.timeout_s = 0.5 * link.timeout_s, 2.0 * link.timeout_s

        def receive_within_own_timeout(query: str) -> bytes:
            link._socket.settimeout(own_timeout_s)
            try:
                return bytes(receive(query))
            except Unreachable as error:
                late.extend([error] if isinstance(error.__cause__, TimeoutError) else [])
                raise

        link._receive_some = receive_within_own_timeout
        link._drop = lambda: late.clear() if late else drop()
        link._is_silent = lambda: True


class SwitchesOffOnOpening(ScpiRfSource):
    def __init__(self, *arguments: Any) -> None:
        super().__init__(*arguments)
        self.set_output(False)


class ResetsBeforeClosing(ScpiDcSupply):
    closed = False

    def close(self) -> None:
        if not self.closed:
            self.closed = True
            with suppress(Exception):
                self.set_voltage_v(1, 0.0)
        super().close()


class ClosesOnce(ScpiDcSupply):
    closed = False

    def close(self) -> None:
        if self.closed:
            raise ValueError("close of a closed instrument")
        self.closed = True
        super().close()


class NumbersItsReadings(ScpiRfSource):
    count = itertools.count()

    def read_identity(self) -> Identity:
        found = super().read_identity()
        return Identity(manufacturer=found.manufacturer, model=found.model, serial=str(next(self.count)), firmware="1")


class RepeatsItsNews(ScpiRfSource):
    news: Status | None = None

    def read_status(self) -> Status:
        now = super().read_status()
        before, self.news = self.news, now
        return before if before is not None and before.errors else now


class SwallowsPowerOn(ScpiDcSupply):
    def read_status(self) -> Status:
        found = super().read_status()
        return Status(power_on=False, errors=found.errors, tripped=found.tripped)


class CannotBeInterrupted(ScpiRfSource):
    def interrupt(self) -> None:
        pass


class ReadsRmsAsPeak(ScpiRfSource):
    def read_level_v(self) -> float:
        return super().read_level_v() / math.sqrt(2.0)


class ClampsSilently(ScpiRfSource):
    def set_level_v(self, level_v: float) -> None:
        super().set_level_v(min(max(0.0, level_v), self.level.high))


class AsksBeforeRefusing(ScpiDcSupply):
    def set_voltage_v(self, channel: int, voltage_v: float) -> None:
        self.read_output(channel)
        super().set_voltage_v(channel, voltage_v)


class NeverAsksForErrors(ScpiDcSupply):
    def set_voltage_v(self, channel: int, voltage_v: float) -> None:
        with suppress(InstrumentRefused):
            super().set_voltage_v(channel, voltage_v)


class ReadsWhatItSent(ScpiRfSource):
    sent: float | None = None

    def set_level_v(self, level_v: float) -> None:
        if self.level.low <= level_v <= self.level.high:
            self.sent = self.level.quantise(level_v)
        super().set_level_v(level_v)

    def read_level_v(self) -> float:
        found = super().read_level_v()
        return found if self.sent is None else self.sent


class EnablesOnSet(ScpiRfSource):
    def set_level_v(self, level_v: float) -> None:
        super().set_level_v(level_v)
        super().set_output(True)


class RetunesWhenSwitched(ScpiRfSource):
    def set_output(self, on: bool) -> None:
        super().set_output(on)
        super().set_frequency_hz(self.frequency.low)


class BelievesItIsOff(ScpiRfSource):
    on = True

    def set_output(self, on: bool) -> None:
        if on or self.on:
            super().set_output(on)
        self.on = on

    def start_burst(self, duration_s: float) -> None:
        self.on = True
        super().start_burst(duration_s)


class MeasuresWhatIsProgrammed(ScpiRfSource):
    def measure_level_v(self) -> float:
        return self.read_level_v()


class MeasuresRms(ScpiRfSource):
    def measure_level_v(self) -> float | None:
        found = super().measure_level_v()
        return None if found is None else found / math.sqrt(2.0)


class SwitchesAllChannels(ScpiDcSupply):
    def set_output(self, channel: int, on: bool) -> None:
        super().set_output(channel, on)
        for other in self.channels:
            super().set_output(other, on)


class TracksTwoChannels(ScpiDcSupply):
    def set_voltage_v(self, channel: int, voltage_v: float) -> None:
        super().set_voltage_v(channel, voltage_v)
        if channel == 3:
            super().set_voltage_v(4, voltage_v)


class KnowsNoLastChannel(ScpiDcSupply):
    def _require(self, channel: int) -> None:
        pass


BROKEN: tuple[tuple[int, type[Instrument]], ...] = (
    (1, OnlyInItsFirstThread),
    (2, TriesAgainOnItsOwn),
    (3, TrustsWhoeverAnswers),
    (3, KeepsALateReply),
    (4, SwitchesOffOnOpening),
    (4, ResetsBeforeClosing),
    (5, ClosesOnce),
    (6, NumbersItsReadings),
    (7, RepeatsItsNews),
    (7, SwallowsPowerOn),
    (8, CannotBeInterrupted),
    (9, ReadsRmsAsPeak),
    (10, ClampsSilently),
    (10, AsksBeforeRefusing),
    (11, NeverAsksForErrors),
    (11, ReadsWhatItSent),
    (12, EnablesOnSet),
    (12, RetunesWhenSwitched),
    (13, BelievesItIsOff),
    (14, MeasuresWhatIsProgrammed),
    (14, MeasuresRms),
    (15, SwitchesAllChannels),
    (15, TracksTwoChannels),
    (16, KnowsNoLastChannel),
)
