"""The schedule with the real controller and a simulated rack: the due run's entry is the controller's."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.controller.bench import SCANNED, bench
from tests.schedule.stage import HALF_HOURLY, MINUTE_US
from trapd.clock import SystemClock
from trapd.record import Reader
from trapd.schedule import Schedule
from trapd.setpoint import Contents


class SetClock(SystemClock):
    """Goes as the machine's, from another time of day."""

    shift_us = 0

    def now_us(self) -> int:
        return super().now_us() + self.shift_us


@pytest.mark.long
def test_what_is_due_is_recorded_with_its_request_and_begun(tmp_path: Path) -> None:
    clock = SetClock()
    with bench(tmp_path, SCANNED, clock=clock) as made, Reader.open(made.path) as reader:
        made.switch_on(held=False)
        made.rack.load_ion()
        made.ask("ions", contents=Contents(presence="held", ions={"40Ca+": 1}))
        due_us = (clock.now_us() // (30 * MINUTE_US) + 1) * 30 * MINUTE_US
        clock.shift_us = due_us - clock.now_us() - 50_000
        schedule = Schedule([HALF_HOURLY], controller=made.controller, record=made.record, reader=reader, clock=clock)
        schedule.start()
        made.wait(lambda: reader.newest_due("x") is not None)
        made.wait(lambda: made.controller.situation.scanning is not None)
        schedule.close(10)
        (one,) = reader.due_runs()
        assert (one.due_us, one.state, one.reason) == (due_us, "run", "")
        assert one.request is not None
        request = reader.entry(one.request)
        assert (request.kind, request.actor, request.data["scan"]) == ("request", "schedule", "x")
