"""Builds, starts and stops everything, in order. The only file that opens concrete drivers."""

from __future__ import annotations

import logging
import platform
import signal
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import ExitStack
from importlib.metadata import version
from pathlib import Path
from typing import Any

from threadpoolctl import threadpool_limits

from trapd.address import runtime_socket
from trapd.api.app import build_app
from trapd.api.server import ApiServer
from trapd.api.service import Service
from trapd.cautions import CAUTIONS
from trapd.clock import Clock, SystemClock, boot_id
from trapd.config.build import guard_of
from trapd.config.digest import as_data
from trapd.config.read import read
from trapd.config.records import Config
from trapd.controller import Controller, Desk, Remembered, Situation, adopting
from trapd.errors import ConfigError, InstrumentUnreachable
from trapd.instrument_lock import InstrumentLocks
from trapd.record import Draft, Reader, Record
from trapd.remember import remember
from trapd.schedule import Schedule
from trapd.setpoint import Contents
from trapd.wiring import Wiring
from trapd_drivers.absent import open_or_absent
from trapd_drivers.errors import DriverError, ProfileError
from trapd_drivers.interfaces import Instrument
from trapd_drivers.worker import Worker

ADOPTION_S = 30.0
"""The longest the first look at the instruments may take."""

CLOSING_S = 10.0

_CHATTY = {
    "alembic": logging.WARNING,
    "apscheduler": logging.WARNING,
    "pint": logging.ERROR,
    "uvicorn": logging.WARNING,
}

_log = logging.getLogger("trapd")


class Daemon:
    """One trap's service. `start` raises what went wrong, and then nothing is left behind; `stop` may be called twice."""

    def __init__(self, path: Path, *, clock: Clock | None = None) -> None:
        self.path = path
        self.clock = clock or SystemClock()
        self._closing = ExitStack()

    def start(self) -> None:
        with ExitStack() as stack:
            self._build(stack)
            self._closing = stack.pop_all()

    def stop(self) -> None:
        """API first, then the controller (a move stops where it is), the links, the record, the locks."""
        self._closing.close()

    def _build(self, stack: ExitStack) -> None:
        config = read(self.path)
        if not config.instruments:
            raise ConfigError(f"{self.path}: [instruments] is missing; a daemon needs them; nothing was opened")
        stack.enter_context(threadpool_limits(limits=1, user_api="blas"))
        stack.enter_context(InstrumentLocks(one.resource for one in config.instruments.values()))
        record = Record.open(config.record_file, clock=self.clock, boot_id=boot_id())
        stack.callback(record.close, CLOSING_S)
        remembered = _remembered(config.record_file)
        _wait(record.append(_start_draft(), Draft(kind="configuration", actor="trapd", data=as_data(config))))
        stack.callback(lambda: record.append(Draft(kind="stop", actor="trapd", data={})))

        instruments = _open_instruments(config, stack)
        wiring = Wiring(config, instruments)
        model = guard_of(config, wiring.scales)
        workers = {name: Worker(instrument, name) for name, instrument in instruments.items()}
        for worker in workers.values():
            stack.callback(worker.close, CLOSING_S)
        judges = ThreadPoolExecutor(1, thread_name_prefix="judge")
        others = ThreadPoolExecutor(1, thread_name_prefix="dry judge")
        estimates = ThreadPoolExecutor(1, thread_name_prefix="estimate")
        stack.callback(estimates.shutdown, wait=False, cancel_futures=True)
        stack.callback(judges.shutdown, wait=False, cancel_futures=True)
        stack.callback(others.shutdown, wait=False, cancel_futures=True)

        desk = Desk(
            config=config,
            model=model,
            wiring=wiring,
            workers=workers,
            record=record,
            clock=self.clock,
            judges=judges,
            estimates=estimates,
            situation=Situation(values={}, outputs={}, contents=Contents(presence="unknown")),
        )
        self.controller = Controller(desk)
        stack.callback(self.controller.close, CLOSING_S)
        try:
            found = self.controller.start(adopting(remembered)).result(ADOPTION_S)
        except TimeoutError as error:
            raise InstrumentUnreachable(
                f"the first look at the instruments took longer than {ADOPTION_S:g} s; every output stays as it is"
            ) from error
        for words in [*found["differences"], *(f"{k}: {v}" for k, v in found["unreachable"].items())]:
            _log.warning("found at the start: %s", words)

        reader = stack.enter_context(Reader.open(config.record_file))
        schedule = Schedule(config.schedule, controller=self.controller, record=record, reader=reader, clock=self.clock)
        schedule.start()
        stack.callback(schedule.close, CLOSING_S)

        service = Service(
            config=config,
            model=model,
            controller=self.controller,
            record=record,
            record_path=config.record_file,
            clock=self.clock,
            judges=others,
            version=version("trapd"),
            schedule=schedule,
            simulated=all(one["simulated"] for one in found["identities"].values()) and not found["unreachable"],
        )
        self.simulated = service.simulated
        self.socket_path = config.server.socket or runtime_socket(config.trap.name)
        server = ApiServer(build_app(service), config.server.host, config.server.port, self.socket_path)
        server.start()
        stack.callback(server.stop)
        self.address: tuple[str, int] = server.address


def serve(path: Path) -> int:
    """`trapd serve`: run until SIGTERM or SIGINT. Outputs are left as they are."""
    logging.basicConfig(level=logging.INFO, format="%(asctime)s %(levelname)s %(message)s")
    for chatty, level in _CHATTY.items():
        logging.getLogger(chatty).setLevel(level)
    # Blocked before any thread exists, so that every thread inherits it and only `sigwait` takes them: a handler would run
    # in the main thread only, and the kernel may wake another one.
    ends = {signal.SIGTERM, signal.SIGINT}
    signal.pthread_sigmask(signal.SIG_BLOCK, ends)
    daemon = Daemon(path)
    daemon.start()
    try:
        host, port = daemon.address
        _log.info("%s: serving on http://%s:%d and %s", path, host, port, daemon.socket_path)
        if not daemon.simulated:
            _log.warning("%s", " ".join(CAUTIONS.split()))
        signal.sigwait(ends)
        _log.info("stopping; every output stays as it is")
    finally:
        daemon.stop()
    return 0


def _start_draft() -> Draft:
    software = {
        name: version(name) for name in ("trapd", "numpy", "scipy", "pyvisa", "pyvisa-py", "sqlalchemy", "apscheduler")
    }
    return Draft(kind="start", actor="trapd", data={"software": software, "python": platform.python_version()})


def _open_instruments(config: Config, stack: ExitStack) -> dict[str, Instrument]:
    opened: dict[str, Instrument] = {}
    for name, section in config.instruments.items():
        try:
            opened[name] = open_or_absent(
                section.driver, section.resource, profile=section.profile, timeout_s=section.timeout_s
            )
        except ProfileError as error:
            raise ConfigError(f"{config.source}: instruments.{name}: {error}") from error
        except DriverError as error:
            raise InstrumentUnreachable(f"instruments.{name}: {error}; every output stays as it is") from error
        stack.callback(opened[name].close)
    return opened


def _remembered(path: Path) -> Remembered:
    with Reader.open(path) as reader:
        return remember(reader)


def _wait(future: Future[Any]) -> None:
    future.result(CLOSING_S)
