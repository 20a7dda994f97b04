"""One count of photons: started, then asked for until it is there. A count changes nothing in the trap."""

from __future__ import annotations

from dataclasses import dataclass

from trapd.controller.activity import Part, Pause, Within
from trapd.controller.desk import Desk
from trapd.controller.looking import ANSWER_S
from trapd.errors import InstrumentUnreachable, NotConfirmed
from trapd_drivers.errors import DriverError, InstrumentRefused, OutOfRange
from trapd_drivers.interfaces import Instrument, PhotonCounter

POLL_S = 0.002


@dataclass(frozen=True, kw_only=True)
class Counted:
    """``frequency_hz`` of the tickle, None when it was off. ``at_us`` (UTC) and ``at_ns`` (monotonic): the middle of the
    dwell. By ``over_ns`` (monotonic) the count had ended: it was there."""

    frequency_hz: float | None
    dwell_s: float
    counts: int
    at_us: int
    at_ns: int
    over_ns: int

    @property
    def rate_per_s(self) -> float:
        return self.counts / self.dwell_s


def count(desk: Desk, dwell_s: float, frequency_hz: float | None = None) -> Part:
    """A `Counted` of ``dwell_s`` from now."""
    assert desk.wiring.counter is not None
    worker = desk.workers[desk.wiring.counter]

    def start(instrument: Instrument) -> tuple[int, int]:
        assert isinstance(instrument, PhotonCounter)
        instrument.start_count(dwell_s)
        return desk.clock.now_us(), desk.clock.monotonic_ns()

    def ask(instrument: Instrument) -> int | None:
        assert isinstance(instrument, PhotonCounter)
        return instrument.read_count()

    try:
        now_us, now_ns = yield Within(worker.submit(start), ANSWER_S)
        yield Pause(dwell_s)
        until_ns = now_ns + int((dwell_s + ANSWER_S) * 1e9)
        while (counts := (yield Within(worker.submit(ask), ANSWER_S))) is None:
            if desk.clock.monotonic_ns() > until_ns:
                raise NotConfirmed(f"{worker.name}: a count of {dwell_s:g} s does not end; the scan ends here")
            yield Pause(POLL_S)
    except (InstrumentRefused, OutOfRange) as error:
        raise NotConfirmed(f"{worker.name}: {error}; the scan ends here") from error
    except (DriverError, TimeoutError) as error:
        why = str(error) or f"no answer within {ANSWER_S:g} s"
        raise InstrumentUnreachable(f"{worker.name}: {why}; the scan ends here") from error
    return Counted(
        frequency_hz=frequency_hz,
        dwell_s=dwell_s,
        counts=counts,
        at_us=now_us + int(dwell_s / 2 * 1e6),
        at_ns=now_ns + int(dwell_s / 2 * 1e9),
        over_ns=desk.clock.monotonic_ns(),
    )
