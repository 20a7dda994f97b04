"""A controller with its record, its links and a simulated rack, without the HTTP above it."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from tests.traps import NORTH_BENCH, SCANS, write
from trapd.clock import Clock, SystemClock
from trapd.config.build import guard_of
from trapd.config.read import read
from trapd.controller import Controller, Desk, Remembered, Situation, Ticket, adopting
from trapd.record import Entry, Reader, Record
from trapd.remember import remember
from trapd.setpoint import Contents, Request
from trapd.wiring import Wiring
from trapd_drivers.absent import open_or_absent
from trapd_drivers.worker import Worker
from trapd_simulated import Rack, RackSettings, Received

QUICK = re.sub(r'slew = "(\d+)', lambda m: f'slew = "{int(m[1]) * 100}', NORTH_BENCH)
"""The north bench with ramps a hundred times as fast."""

SCANNED = QUICK.replace('gain_uncertainty = "2 %"', 'gain_uncertainty = "0.5 %"') + SCANS.replace(
    'span = "200 kHz"', 'span = "60 kHz"\nmodel_uncertainty = "0.1 %"'
)
"""It can scan as well, and knows its gain well enough for a narrow window."""

HELD = Contents(presence="held", ions={"40Ca+": 2})
ENOUGH_S = 30.0


@dataclass
class Bench:
    rack: Rack
    controller: Controller
    record: Record
    path: Path

    def submit(self, kind: str, **fields: Any) -> Ticket:
        return self.controller.submit(Request(kind=kind, author="ada", **{"why": "test", **fields}))  # type: ignore[arg-type]

    def ask(self, kind: str, **fields: Any) -> dict[str, Any]:
        """The answer at the end of the request; raises what it failed with."""
        return self.submit(kind, **fields).done.result(ENOUGH_S)

    def entries(self, kind: str | None = None) -> list[Entry]:
        with Reader.open(self.path) as reader:
            return list(reader.entries(kind=kind, limit=100_000))

    def commands(self, after: int = 0) -> list[str]:
        """What the rack received that was no pure query, from the ``after``-th message on."""
        return [one.text for one in self.rack.received_after(after) if not is_query(one.text)]

    def received(self) -> int:
        return self.rack.received[-1].index if self.rack.received else 0

    def switch_on(self, *, held: bool = True) -> None:
        self.wait_until_empty()
        self.ask("on")
        if held:
            self.ask("ions", contents=HELD)

    def wait_until_empty(self) -> None:
        """The daemon declares the trap empty 1 s after it found RF off."""
        self.wait(lambda: self.controller.situation.contents.presence == "none")

    def wait(self, condition: Callable[[], bool]) -> None:
        import time

        until = time.monotonic() + ENOUGH_S
        while not condition():
            assert time.monotonic() < until, "what was waited for did not come"
            time.sleep(0.005)


def is_query(text: str) -> bool:
    return all(unit.split(" ")[0].rstrip().endswith("?") for unit in text.split(";") if unit.strip())


@contextmanager
def bench(
    folder: Path,
    toml: str = QUICK,
    *,
    settings: RackSettings | None = None,
    clock: Clock | None = None,
    on_receive: Callable[[Received], None] | None = None,
    rack: Rack | None = None,
) -> Iterator[Bench]:
    """A bench whose start is over. With ``rack`` an existing one is used, and left running."""
    with ExitStack() as stack:
        if rack is None:
            rack = stack.enter_context(Rack(settings or RackSettings(), seed=1, on_receive=on_receive))
        path = write(folder, toml, **rack.ports)
        config = read(path)
        clock = clock or SystemClock()
        record = Record.open(config.record_file, clock=clock, boot_id="test")
        stack.callback(record.close)
        with Reader.open(config.record_file) as reader:
            remembered: Remembered = remember(reader)
        instruments = {}
        for name, section in config.instruments.items():
            instruments[name] = open_or_absent(
                section.driver, section.resource, profile=section.profile, timeout_s=section.timeout_s
            )
        wiring = Wiring(config, instruments)
        workers = {name: Worker(instrument, name) for name, instrument in instruments.items()}
        for worker in workers.values():
            stack.callback(worker.close, 5.0)
        judges = stack.enter_context(ThreadPoolExecutor(1))
        desk = Desk(
            config=config,
            model=guard_of(config, wiring.scales),
            wiring=wiring,
            workers=workers,
            record=record,
            clock=clock,
            judges=judges,
            estimates=judges,
            situation=Situation(values={}, outputs={}, contents=Contents(presence="unknown")),
        )
        controller = Controller(desk)
        stack.callback(controller.close)
        controller.start(adopting(remembered)).result(ENOUGH_S)
        yield Bench(rack=rack, controller=controller, record=record, path=config.record_file)
