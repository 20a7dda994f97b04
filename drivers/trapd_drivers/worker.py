"""One thread for each instrument: jobs in order, urgent ones first, and none of them waits for a hung exchange."""

from __future__ import annotations

import contextlib
import threading
from collections import deque
from collections.abc import Callable
from concurrent.futures import Future, InvalidStateError
from typing import Any, Generic, TypeVar

from trapd_drivers.deadline import DEADLINES
from trapd_drivers.errors import Unreachable
from trapd_drivers.interfaces import Instrument

InstrumentT = TypeVar("InstrumentT", bound=Instrument)
T = TypeVar("T")


class Worker(Generic[InstrumentT]):
    """Owns an instrument and the only thread that calls it.

    Jobs run in the order they came; urgent ones before all that are not. When an urgent job waits and the ordinary job
    in progress has not ended within ``patience_s``, the instrument is interrupted, again and again until that job ends.
    Every future gets an answer, `close` included.
    """

    def __init__(self, instrument: InstrumentT, name: str, *, patience_s: float = 0.1) -> None:
        self.instrument = instrument
        self.name = name
        self._patience_s = patience_s
        self._changed = threading.Condition()
        self._urgent: deque[_Job] = deque()
        self._ordinary: deque[_Job] = deque()
        self._current: _Job | None = None
        self._closing = False
        self._thread = threading.Thread(target=self._run, name=f"link {name}", daemon=True)
        self._thread.start()

    def submit(self, job: Callable[[InstrumentT], T], *, urgent: bool = False) -> Future[T]:
        """Run ``job(instrument)`` on the instrument's thread; what it returns or raises goes to the future."""
        future: Future[T] = Future()
        with self._changed:
            if self._closing:
                future.set_exception(self._closed())
                return future
            (self._urgent if urgent else self._ordinary).append(_Job(job, future, urgent))
            self._changed.notify()
            if urgent and self._current is not None and not self._current.urgent:
                self._hurry(self._current)
        return future

    def cancel_pending(self) -> int:
        """Cancel the ordinary jobs that have not begun; their futures are cancelled. How many there were."""
        with self._changed:
            pending, self._ordinary = list(self._ordinary), deque()
        return sum(job.cancel() for job in pending)

    def close(self, timeout_s: float) -> bool:
        """Take no more jobs, cancel what waits, close the instrument; true when all of it ended within the time.

        A job still in progress after the patience is interrupted. One that ignores that is answered with
        `Unreachable` and its thread left behind (it ends with the process).
        """
        with self._changed:
            self._closing = True
            pending = [*self._urgent, *self._ordinary]
            self._urgent.clear()
            self._ordinary.clear()
            if self._current is not None:
                self._hurry(self._current)
            self._changed.notify()
        for job in pending:
            job.cancel()
        self._thread.join(timeout_s)
        with self._changed:
            stuck = self._current
        if stuck is not None:
            stuck.fail(self._closed())
        return not self._thread.is_alive()

    def _closed(self) -> Unreachable:
        return Unreachable(f"{self.name}: closed; the job did not run to its end")

    def _hurry(self, job: _Job) -> None:
        if not job.hurried:
            job.hurried = True
            self._interrupt_later(job)

    def _interrupt_later(self, job: _Job) -> None:
        DEADLINES.after(self._patience_s, lambda: self._interrupt(job))

    def _interrupt(self, job: _Job) -> None:
        # Under the lock, so that it cannot fall on the job after this one; and repeated, because an interrupt between
        # two calls of the same job finds nothing to interrupt.
        with self._changed:
            if self._current is job:
                try:
                    self.instrument.interrupt()
                finally:
                    self._interrupt_later(job)

    def _run(self) -> None:
        while (job := self._next()) is not None:
            job.run(self.instrument)
            with self._changed:
                self._current = None
        with contextlib.suppress(Exception):
            self.instrument.close()

    def _next(self) -> _Job | None:
        with self._changed:
            while True:
                waiting = self._urgent or self._ordinary
                if waiting:
                    job = waiting.popleft()
                    if job.future.set_running_or_notify_cancel():
                        self._current = job
                        return job
                elif self._closing:
                    return None
                else:
                    self._changed.wait()


class _Job:
    def __init__(self, work: Callable[[Any], Any], future: Future[Any], urgent: bool) -> None:
        self.work = work
        self.future = future
        self.urgent = urgent
        self.hurried = False

    def run(self, instrument: Instrument) -> None:
        try:
            result = self.work(instrument)
        except BaseException as error:
            self.fail(error)
        else:
            with contextlib.suppress(InvalidStateError):  # `close` has answered already
                self.future.set_result(result)

    def cancel(self) -> bool:
        return self.future.cancel() and not self.future.set_running_or_notify_cancel()

    def fail(self, error: BaseException) -> None:
        with contextlib.suppress(InvalidStateError):
            self.future.set_exception(error)
