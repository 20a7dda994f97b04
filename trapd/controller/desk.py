"""What every activity works with: the trap's model, its instruments, the record, and the present situation."""

from __future__ import annotations

import logging
from collections import deque
from collections.abc import Callable, Iterable, Mapping, Sequence
from concurrent.futures import Executor, Future
from dataclasses import dataclass, field, replace
from typing import Any, Protocol

from trapd.clock import Clock
from trapd.config.build import guard_of
from trapd.config.records import Config
from trapd.controller.activity import Activity, Part, Pause
from trapd.controller.situation import Situation
from trapd.controller.survey import Survey
from trapd.errors import BadRequest, NotFound, RecordFailed, RecordUnwritable, Superseded, TrapdError
from trapd.guard.model import GuardModel
from trapd.guard.verdict import judge, judge_move
from trapd.record import Draft, Entry
from trapd.setpoint import Contents, Ramp, Values, Verdict
from trapd.wiring import Wiring
from trapd_drivers.interfaces import Instrument, Scale
from trapd_drivers.worker import Worker

RETRY_S = 1.0
"""How often what could not be written or switched off is tried again."""

_log = logging.getLogger(__name__)


class Journal(Protocol):
    """The part of the record that the controller needs."""

    def append(self, *drafts: Draft) -> Future[tuple[Entry, ...]]: ...


class Spawn(Protocol):
    """Begin an activity of its own. ``to_the_end``: neither off nor the daemon's end may cut it short."""

    def __call__(self, activity: Activity, *, to_the_end: bool = False) -> None: ...


@dataclass
class Desk:
    """Owned by the controller's thread; nobody else changes it. ``situation`` may be read from anywhere.

    ``events``: surveys that found something an instrument tells only once, until a look has dealt with them.
    ``contents_open``: commits under way that say what is in the trap; ``claiming``: one that says who claims it.
    ``judges``: one verdict at a time, nobody waits long; ``estimates``: what a scan has found, which may take longer.
    ``sent`` counts the commands handed to each instrument: what was read of it before the last of them is stale. Before
    ``rest_until_ns`` (monotonic) the last step has not settled, and no other setpoint may move.
    """

    config: Config
    model: GuardModel
    wiring: Wiring
    workers: Mapping[str, Worker[Instrument]]
    record: Journal
    clock: Clock
    judges: Executor
    estimates: Executor
    situation: Situation
    spawn: Spawn = field(init=False)
    sent: dict[str, int] = field(init=False)
    claiming: bool = False
    rest_until_ns: int = 0
    loading_until_ns: int | None = None
    contents_open: int = 0
    unwritten: deque[tuple[Draft, ...]] = field(default_factory=deque)
    retry_due_ns: int = 0
    last_words: list[str] = field(default_factory=list)
    scales: Mapping[str, Scale] = field(init=False)
    events: deque[Survey] = field(default_factory=deque)

    def __post_init__(self) -> None:
        self.scales = self.wiring.scales
        self.sent = dict.fromkeys(self.workers, 0)

    def refit(self) -> None:
        """An instrument that was absent at the start has told its limits meanwhile."""
        scales = self.wiring.scales
        if scales != self.scales:
            self.scales, self.model = scales, guard_of(self.config, scales)

    def change(self, **changes: Any) -> None:
        """Replace the situation by one that differs in these fields."""
        self.situation = replace(self.situation, **changes)

    def submit(self, instrument: str, job: Callable[[Instrument], Any], *, urgent: bool = False) -> Future[Any]:
        """Hand a job that commands something to the instrument's own thread."""
        self.sent[instrument] += 1
        return self.workers[instrument].submit(job, urgent=urgent)

    def rest(self, seconds: float, since_ns: int) -> None:
        """Nothing else moves until ``seconds`` after ``since_ns``."""
        self.rest_until_ns = max(self.rest_until_ns, since_ns + int(seconds * 1e9))

    def wait_until_rested(self) -> Part:
        remaining_ns = self.rest_until_ns - self.clock.monotonic_ns()
        if remaining_ns > 0:
            yield Pause(remaining_ns / 1e9)

    def judge_move(self, contents: Contents, present: Values, target: Values) -> Future[tuple[Verdict, Ramp | None]]:
        """The guard's answer, computed off this thread."""
        return self.judges.submit(judge_move, self.model, contents, dict(present), dict(target))

    def judge(self, contents: Contents, values: Values) -> Future[Verdict]:
        return self.judges.submit(judge, self.model, contents, dict(values))

    def note(self, *drafts: Draft) -> Future[tuple[Entry, ...]]:
        """Append what has happened already. If it cannot be written now it is kept and tried again, flagged as such; and
        what comes after something that waits, waits behind it."""
        happened_us = self.clock.now_us()
        if not self.unwritten:
            return self._write(drafts, happened_us)
        behind: Future[tuple[Entry, ...]] = Future()
        behind.set_exception(RecordUnwritable("waits behind what could not be written before"))
        self._keep(behind, drafts, happened_us)
        return behind

    def retry_unwritten(self) -> list[Future[tuple[Entry, ...]]]:
        """Try to append again what could not be written, oldest first."""
        waiting = [self.unwritten.popleft() for _ in range(len(self.unwritten))]
        return [self._write(drafts, self.clock.now_us()) for drafts in waiting]

    def write_what_waits(self) -> Part:
        """What happened earlier stands in the record before anything new does; else nothing new begins."""
        for future in self.retry_unwritten():
            try:
                yield future
            except (RecordFailed, Superseded):
                raise
            except TrapdError:  # it was dropped, and logged; that is no reason to refuse this request
                continue

    def _write(self, drafts: Sequence[Draft], happened_us: int) -> Future[tuple[Entry, ...]]:
        future = self.record.append(*drafts)
        future.add_done_callback(lambda done: self._keep(done, drafts, happened_us))
        return future

    def to_its_end(self, activity: Activity) -> Part:
        """Wait for an activity that nothing cuts short. Whoever waits may be superseded; the activity goes on."""
        ended: Future[dict[str, Any]] = Future()

        def whole() -> Activity:
            try:
                answer = yield from activity
            except Exception as error:
                ended.set_exception(error)
                raise
            ended.set_result(answer)
            return answer

        self.spawn(whole(), to_the_end=True)
        return (yield ended)

    def require_setpoints(self, names: Iterable[str]) -> None:
        """`BadRequest` for one that the trap does not have."""
        unknown = [name for name in names if name not in self.model.limits]
        if unknown:
            raise BadRequest(f"no setpoint {unknown[0]!r}; there are: {', '.join(self.model.limits)}; nothing was sent")

    def point(self, name: str | None) -> Mapping[str, float]:
        """A named operating point; the first of the file when no name is given."""
        points = self.config.points
        if name is None:
            if not points:
                raise BadRequest("the trap file has no [points]; name the setpoints instead; nothing was sent")
            return next(iter(points.values()))
        if name not in points:
            there_are = f"there are: {', '.join(points)}" if points else "there is none"
            raise NotFound(f"no point {name!r} in the trap file; {there_are}; nothing was sent")
        return points[name]

    def _keep(self, done: Future[tuple[Entry, ...]], drafts: Sequence[Draft], happened_us: int) -> None:
        # Runs on the writer's thread, while the controller's may take from the other end.
        error = done.exception()
        if isinstance(error, RecordFailed):
            if not self.unwritten:
                _log.error("the record cannot be written: %s; what happens is kept and written later", error)
            late = {"written_late": True, "happened_us": happened_us}
            self.unwritten.append(tuple(replace(draft, data={**late, **draft.data}) for draft in drafts))
        elif error is not None:
            # Such as a second outcome of one intent: the first try was on the disk after all when the disk failed.
            _log.error("an entry was not taken and is dropped: %s", error)
