"""`Record`: the one writer. A thread takes appends from a queue, commits them in order and answers their futures."""

from __future__ import annotations

import logging
import sqlite3
import threading
from collections.abc import Callable, Sequence
from concurrent.futures import Future
from pathlib import Path
from queue import SimpleQueue
from typing import Any, NamedTuple

from trapd.clock import Clock
from trapd.errors import Bug, RecordUnwritable, TrapdError
from trapd.record.entry import Draft, Entry, Head, Sealed, SeqsNeededError, Stamp, chain, seal
from trapd.record.file import NOTHING, RecordFile

_log = logging.getLogger(__name__)

_MOST_APPENDS_A_COMMIT = 256

Listener = Callable[[tuple[Entry, ...]], None]


class _Append(NamedTuple):
    drafts: tuple[Draft | Sealed, ...]
    answer: Future[tuple[Entry, ...]]


class _Batch:
    """What goes into one commit: rows by table, and the entries of each append."""

    def __init__(self, head: Head) -> None:
        self.head = head
        self.rows: dict[str, list[Sequence[Any]]] = {"entries": []}
        self.answers: list[tuple[_Append, tuple[Entry, ...]]] = []

    def add(self, append: _Append, stamp: Stamp) -> None:
        """Join ``append`` to the commit. Raises `Bug`, and then nothing of it has joined."""
        links = chain(append.drafts, self.head, stamp)
        for stored, _, typed in links:
            self.rows["entries"].append(stored)
            if typed is not None:
                self.rows.setdefault(typed.table, []).append((stored.seq, *typed.values))
        self.answers.append((append, tuple([entry for _, entry, _ in links])))
        self.head = Head(stored.seq, stored.digest)


class Record:
    """The append-only record, opened to write by this process alone.

    1. `append` never blocks and never raises; entries get their seq in the order of the calls.
    2. The drafts of one append are committed together; several waiting appends may share a commit.
    3. An answered future means: on the disk. A failed one: none of its drafts is known to be there; if the disk failed
       in the very commit they may turn up later, as intents without an outcome do.
    4. After a failure the next append tries anew, so writing resumes once the cause is gone.
    """

    def __init__(self, file: RecordFile, *, clock: Clock, boot_id: str) -> None:
        """Use `open`."""
        self._file = file
        self._clock = clock
        self._boot_id = boot_id
        self._head = file.head
        self._listeners: list[Listener] = []
        self._queue: SimpleQueue[_Append | None] = SimpleQueue()
        self._door = threading.Lock()
        self._closed = False
        self._thread = threading.Thread(target=self._run, name="record writer", daemon=True)
        self._thread.start()

    @classmethod
    def open(cls, path: Path, *, clock: Clock, boot_id: str) -> Record:
        """Create, migrate or continue the record at ``path``.

        Raises `Locked` if another process writes it, `RecordUnwritable`, `RecordDamaged` if the tail of the chain does
        not verify, `ConfigError` if the file is another program's or a newer trapd's.
        """
        file = RecordFile(path)
        try:
            file.prepare()
        except BaseException:
            file.close()
            raise
        return cls(file, clock=clock, boot_id=boot_id)

    @property
    def path(self) -> Path:
        return self._file.path

    @property
    def last_seq(self) -> int:
        """Seq of the newest committed entry; 0 when there is none."""
        return self._head.seq

    @property
    def head(self) -> str:
        """Digest of the newest committed entry, in hexadecimal. Noted elsewhere it shows that nothing was rewritten."""
        return self._head.digest

    def append(self, *drafts: Draft) -> Future[tuple[Entry, ...]]:
        """Write ``drafts`` in one commit. The future fails with `RecordUnwritable`, or with `Bug` for bad data."""
        answer: Future[tuple[Entry, ...]] = Future()
        answer.set_running_or_notify_cancel()  # what is queued gets written: there is no taking it back
        if not drafts:
            answer.set_result(())
            return answer
        try:
            append = _Append(tuple(_sealed_if_possible(draft) for draft in drafts), answer)
        except Bug as error:
            answer.set_exception(error)
            return answer
        with self._door:
            if not self._closed:
                self._queue.put(append)
                return answer
        answer.set_exception(RecordUnwritable(f"{self.path} is closed; {NOTHING}"))
        return answer

    def add_listener(self, listener: Listener) -> None:
        """Call ``listener`` from the writer's thread with the entries of each commit. Be quick, do not raise."""
        self._listeners = [*self._listeners, listener]

    def close(self, timeout_s: float | None = None) -> bool:
        """Write what is queued and let go of the file. False if that took longer than ``timeout_s``."""
        with self._door:
            if not self._closed:
                self._closed = True
                self._queue.put(None)
        self._thread.join(timeout_s)
        return not self._thread.is_alive()

    def _run(self) -> None:
        open_ = True
        while open_:
            waiting = self._take()
            open_ = waiting[-1] is not None
            appends = [append for append in waiting if append is not None]
            if appends:
                self._write(appends)
        self._file.close()

    def _take(self) -> list[_Append | None]:
        """Wait for an append and take what else is queued; None, always the last, means close."""
        waiting = [self._queue.get()]
        while waiting[-1] is not None and len(waiting) < _MOST_APPENDS_A_COMMIT and not self._queue.empty():
            waiting.append(self._queue.get())  # does not wait: nobody else takes from this queue
        return waiting

    def _write(self, appends: Sequence[_Append]) -> None:
        try:
            batch = self._join(appends)
            if batch.answers:
                self._file.commit(batch.rows, batch.head)
        except sqlite3.IntegrityError as error:
            if len(appends) > 1:  # one of them is at fault: the others must not suffer for it
                for append in appends:
                    self._write([append])
                return
            self._fail(appends, Bug(f"the record's schema refused an entry ({error}); {NOTHING}"))
        except TrapdError as error:
            self._fail(appends, error)
        except Exception as error:  # whatever it is, the callers must hear of it and the thread must go on
            _log.exception("the record's writer failed")
            self._file.disconnect()
            self._fail(appends, Bug(f"the record's writer failed ({error!r}); {NOTHING}"))
        else:
            self._answer(batch)

    def _join(self, appends: Sequence[_Append]) -> _Batch:
        batch = _Batch(self._file.ready())
        stamp = Stamp(self._clock.now_us(), self._clock.monotonic_ns(), self._boot_id)
        for append in appends:
            try:
                batch.add(append, stamp)
            except Bug as error:
                self._fail([append], error)
        return batch

    def _answer(self, batch: _Batch) -> None:
        self._head = batch.head
        commit = tuple([entry for _, entries in batch.answers for entry in entries])
        for append, entries in batch.answers:
            append.answer.set_result(entries)
        for listener in self._listeners:
            try:
                listener(commit)
            except Exception:
                _log.exception("a listener of the record raised")

    def _fail(self, appends: Sequence[_Append], error: TrapdError) -> None:
        for append in appends:
            if not append.answer.done():
                append.answer.set_exception(error)


def _sealed_if_possible(draft: Draft) -> Draft | Sealed:
    """Sealed in the caller's thread, which may do so while the last commit waits for the disk."""
    try:
        return seal(draft)
    except SeqsNeededError:
        return draft
