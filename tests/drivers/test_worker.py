"""The worker: order, urgency, and an answer for every future."""

from __future__ import annotations

import threading
import time
from collections.abc import Iterator
from concurrent.futures import CancelledError, Future
from contextlib import contextmanager
from operator import methodcaller
from typing import Any

import pytest

from trapd_drivers.errors import Unreachable
from trapd_drivers.interfaces import Identity, Instrument, Status
from trapd_drivers.worker import Worker


class Bell(Instrument):
    """An instrument whose every call can be held until it is interrupted or released."""

    resource = "bell"

    def __init__(self) -> None:
        self.calls: list[str] = []
        self.entered = threading.Event()
        self.released = threading.Event()
        self.interrupts = 0
        self.deaf = False
        self.closed = threading.Event()

    def hold(self) -> str:
        self.entered.set()
        if not self.released.wait(10):
            raise AssertionError("nobody ended the call")
        self.released.clear()
        if self.interrupts:
            raise Unreachable("interrupted")
        return "released"

    def note(self, name: str) -> str:
        self.calls.append(name)
        return name

    def read_identity(self) -> Identity:
        raise NotImplementedError

    def read_status(self) -> Status:
        raise NotImplementedError

    def interrupt(self) -> None:
        self.interrupts += 1
        if not self.deaf:
            self.released.set()

    def close(self) -> None:
        self.closed.set()


def result(future: Future[Any]) -> Any:
    return future.result(timeout=5)


@contextmanager
def holding(patience_s: float = 30.0, *, deaf: bool = False) -> Iterator[tuple[Bell, Worker[Bell], Future[str]]]:
    """A worker in the middle of a job that ends only when it is interrupted or released."""
    bell = Bell()
    bell.deaf = deaf
    worker = Worker(bell, "bell", patience_s=patience_s)
    held = worker.submit(Bell.hold)
    assert bell.entered.wait(5)
    yield bell, worker, held
    assert worker.close(5)


def test_jobs_run_in_order_and_urgent_ones_before_the_others() -> None:
    with holding() as (bell, worker, held):
        futures = [worker.submit(methodcaller("note", name)) for name in ("first", "second")]
        futures += [worker.submit(methodcaller("note", name), urgent=True) for name in ("off", "off again")]
        bell.released.set()
        assert result(held) == "released"
        for future in futures:
            result(future)
        assert bell.calls == ["off", "off again", "first", "second"]


def test_all_jobs_run_in_one_thread_which_is_not_the_callers() -> None:
    worker = Worker(Bell(), "bell")
    threads = {result(worker.submit(lambda it: threading.get_ident())) for _ in range(3)}
    assert len(threads) == 1
    assert threads != {threading.get_ident()}
    assert worker.close(5)


def test_an_urgent_job_does_not_wait_for_a_hung_one() -> None:
    with holding(0.1) as (_, worker, held):
        start_s = time.monotonic()
        off = worker.submit(lambda it: it.note("off"), urgent=True)
        assert result(off) == "off"
        assert 0.09 < time.monotonic() - start_s < 1.0
        with pytest.raises(Unreachable):
            result(held)


def test_the_interrupt_is_repeated_until_the_hung_job_ends_and_never_meets_the_urgent_one() -> None:
    with holding(0.02, deaf=True) as (bell, worker, held):
        counted: list[int] = []

        def off(it: Bell) -> None:
            counted.append(it.interrupts)
            threading.Event().wait(0.2)  # ten times the patience: room for an interrupt that should not come
            counted.append(it.interrupts)

        urgent = worker.submit(off, urgent=True)
        while bell.interrupts < 3:
            time.sleep(0.005)
        bell.released.set()
        result(urgent)
        with pytest.raises(Unreachable):
            result(held)
        assert counted[0] == counted[1] >= 3


def test_an_ordinary_job_interrupts_nothing() -> None:
    with holding(0.01) as (bell, worker, held):
        worker.submit(lambda it: it.note("next"))
        threading.Event().wait(0.1)
        assert bell.interrupts == 0
        bell.released.set()
        assert result(held) == "released"


def test_what_a_job_raises_goes_to_its_future_and_the_worker_lives_on() -> None:
    worker = Worker(Bell(), "bell")
    with pytest.raises(ZeroDivisionError):
        result(worker.submit(lambda it: 1 // 0))
    assert result(worker.submit(lambda it: it.note("next"))) == "next"
    assert worker.close(5)


def test_pending_jobs_can_be_cancelled_but_not_the_urgent_ones() -> None:
    with holding() as (bell, worker, held):
        ordinary = [worker.submit(lambda it: it.note("step")) for _ in range(3)]
        off = worker.submit(lambda it: it.note("off"), urgent=True)
        assert worker.cancel_pending() == 3
        bell.released.set()
        assert (result(held), result(off)) == ("released", "off")
        for future in ordinary:
            with pytest.raises(CancelledError):
                result(future)
        assert bell.calls == ["off"]


def test_close_ends_a_hung_job_answers_every_future_and_closes_the_instrument() -> None:
    bell = Bell()
    worker = Worker(bell, "bell", patience_s=0.02)
    held, waiting = worker.submit(Bell.hold), worker.submit(lambda it: it.note("step"))
    bell.entered.wait(5)
    assert worker.close(5)
    with pytest.raises(Unreachable):
        result(held)
    with pytest.raises(CancelledError):
        result(waiting)
    with pytest.raises(Unreachable, match="closed"):
        result(worker.submit(lambda it: it.note("too late")))
    assert bell.closed.is_set()
    assert bell.calls == []


def test_close_is_bounded_even_when_a_job_cannot_be_ended() -> None:
    bell = Bell()
    bell.deaf = True
    worker = Worker(bell, "bell", patience_s=0.02)
    held = worker.submit(Bell.hold)
    bell.entered.wait(5)
    start_s = time.monotonic()
    assert not worker.close(0.1)
    assert time.monotonic() - start_s < 1.0
    with pytest.raises(Unreachable, match="did not run to its end"):
        result(held)
    bell.deaf = False  # let the thread end with this test
    assert bell.closed.wait(5)
