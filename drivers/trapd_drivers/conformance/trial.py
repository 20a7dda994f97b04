"""One clause on trial: the bench it runs on, the instrument in its hands, and the three ways it can end."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass

from trapd_drivers.conformance.proxy import Proxy, can_stand_before
from trapd_drivers.errors import DriverError
from trapd_drivers.interfaces import Instrument
from trapd_drivers.registry import DriverClass

LONGEST_S = 60.0  # for one clause
SLACK_S = 0.5  # what a busy machine may add to a bound


class Broken(Exception):
    """The driver does not do what the clause says."""


class NotTried(Exception):
    """The clause cannot be tried here; the text says why."""


@dataclass(frozen=True, kw_only=True)
class Bench:
    """What to try and where. Without ``allow_output`` nothing is set and no output is switched."""

    driver: DriverClass
    resource: str
    profile: str = "plain"
    timeout_s: float = 0.5
    allow_output: bool = False

    def open(self, resource: str | None = None, timeout_s: float | None = None) -> Instrument:
        timeout_s = self.timeout_s if timeout_s is None else timeout_s
        return self.driver.open(resource or self.resource, profile=self.profile, timeout_s=timeout_s)


class Trial:
    """One clause's own proxy and instruments; everything is closed at its end."""

    def __init__(self, bench: Bench) -> None:
        self.bench = bench
        self._proxy = Proxy(bench.resource) if can_stand_before(bench.resource) else None
        self._opened: list[Instrument] = []
        self._watchdog = threading.Timer(LONGEST_S, self._give_up)
        self._watchdog.daemon = True
        self._watchdog.start()

    @property
    def proxy(self) -> Proxy:
        if self._proxy is None:
            raise NotTried(f"no proxy can stand before {self.bench.resource}")
        return self._proxy

    def open(self, timeout_s: float | None = None) -> Instrument:
        """A new instrument through the proxy where there is one."""
        self._opened.append(self.bench.open(self._proxy.resource if self._proxy else None, timeout_s))
        return self._opened[-1]

    def require_output(self) -> None:
        if not self.bench.allow_output:
            raise NotTried("it would change settings, which was not allowed")

    def require_scpi(self) -> None:
        """Call it once the instrument is open."""
        if not self.proxy.speaks_scpi:
            raise NotTried("the driver does not speak IEEE 488.2, so its queries cannot be told from its commands")

    def close(self) -> None:
        self._watchdog.cancel()
        if self._proxy is not None:
            self._proxy.close()
        for instrument in self._opened:
            with suppress(Exception):
                instrument.close()

    def _give_up(self) -> None:
        """A call that does not end is ended from outside, if that is possible at all."""
        if self._proxy is not None:
            self._proxy.close()
        for instrument in self._opened:
            with suppress(Exception):
                instrument.interrupt()


Check = Callable[[Trial], None]


def require(condition: bool, otherwise: str) -> None:
    if not condition:
        raise Broken(otherwise)


def failure_of(call: Callable[[], object]) -> DriverError | None:
    """The driver's error, None when the call returns. Any other exception breaks the clause."""
    try:
        call()
    except DriverError as error:
        return error
    except Exception as error:
        raise Broken(f"{name_of(call)} raised {type(error).__name__} ({error}), which is no DriverError") from error
    return None


def timed(call: Callable[[], object]) -> tuple[DriverError | None, float]:
    """How a call ended and how long it took, in s."""
    start_s = time.monotonic()
    error = failure_of(call)
    return error, time.monotonic() - start_s


def name_of(call: Callable[[], object]) -> str:
    inner = getattr(call, "func", call)
    return str(getattr(inner, "__name__", inner))
