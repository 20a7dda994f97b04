"""What every SCPI instrument shares: asking, setting with an error check, and events that are reported exactly once."""

from __future__ import annotations

from collections.abc import Callable
from contextlib import AbstractContextManager
from dataclasses import dataclass, field
from typing import TypeVar

from trapd_drivers.dialect import Question
from trapd_drivers.errors import InstrumentRefused, Malformed
from trapd_drivers.form import Form
from trapd_drivers.interfaces import Identity
from trapd_drivers.link import Link
from trapd_drivers.profile import Profile
from trapd_drivers.quantity import Reading
from trapd_drivers.scpi import answers

_POWER_ON = 128  # bit 7 of the standard event status register, IEEE 488.2-1992 11.5.1 [mem]
_LONGEST_QUEUE = 256
T = TypeVar("T")


@dataclass
class Events:
    """What happened and has not been reported yet."""

    power_on: bool = False
    tripped: bool = False
    errors: list[tuple[int, str]] = field(default_factory=list)


class Session:
    """A link that speaks SCPI. All but `interrupt` and `close` belong inside ``with session.call():``.

    ``*OPC?`` is never taken for "settled": it says that the command was executed, not that the terminals have it.
    """

    def __init__(self, resource: str, profile: Profile, timeout_s: float) -> None:
        self.resource = resource
        self._dialect = profile.status
        self._events = Events()
        self.power_ons = 0  # that were noticed
        self._opened = False
        self._base_lost = False
        self._link = Link(
            resource,
            timeout_s=max(timeout_s, profile.timeout_s),
            wire=profile.wire,
            identity_query=self._dialect.identity,
            on_open=self._look,
        )

    def call(self) -> AbstractContextManager[None]:
        return self._link.call()

    def interrupt(self) -> None:
        self._link.interrupt()

    def close(self) -> None:
        self._link.close()

    def read_identity(self) -> Identity:
        return self._read(self._dialect.identity, self._link.read_identity(), answers.identity)

    def read_number(self, reading: Reading, *, query: Form | None = None, channel: int = 0) -> float:
        """The SI value that the reading's query tells, or another ``query`` with replies of the same kind."""

        def in_si(text: str) -> float:
            try:
                return reading.unit.to_si(answers.number(text))
            except ValueError as error:
                raise Malformed(str(error)) from error

        return self._ask(query or reading.query, reading.reply, channel, in_si)

    def read_gauge(self, reading: Reading) -> float:
        """As `read_number`, of an instrument that may answer SCPI's not-a-number: `InstrumentRefused`."""
        said = self._ask(reading.query, reading.reply, 0, lambda text: text)
        if answers.is_no_number(said):
            raise InstrumentRefused(f"{self.resource}: {reading.query.text!r} was answered {said!r}: it cannot tell")
        return reading.unit.to_si(self._read(reading.query.text, said, answers.number))

    def read_count(self, reading: Reading) -> int:
        return self._ask(reading.query, reading.reply, 0, answers.whole_number)

    def read_state(self, question: Question, channel: int = 0) -> bool:
        def is_yes(text: str) -> bool:
            if question.bits:
                return bool(answers.whole_number(text) & question.bits)
            if question.no is not None and text.upper() not in question.yes | question.no:
                raise Malformed(f"{text[:40]!r} is neither on nor off")
            return text.upper() in question.yes

        return self._ask(question.query, question.reply, channel, is_yes)

    def command(self, form: Form, *, value: str = "", channel: int = 0, always: bool = False) -> None:
        """Send a command and ask for errors, in one message where the dialect allows it.

        `InstrumentRefused` when there is one; and, unless ``always``, before anything is sent when the instrument was
        switched on since its status was last read: its settings are not those that the caller builds on.
        """
        if self._base_lost and not always:
            raise InstrumentRefused(
                f"{self.resource}: was switched off and on since its status was last read; nothing was sent"
            )
        message = form.written(value=value, channel=channel)
        if self._dialect.error_joined:
            error = self._dialect.error.lstrip(":")
            entries = self._drain(f"{message};{error}" if error.startswith("*") else f"{message};:{error}")
        else:
            self._link.tell(message)
            entries = self._drain(self._dialect.error)
        if entries:
            self._note(entries)
            said = "; ".join(f"{code} {text}" for code, text in entries)
            raise InstrumentRefused(f"{self.resource}: {message!r} was refused: {said}", tuple(entries))

    def take_events(self) -> Events:
        """What happened since the last call, noticed on the way or asked for now; each thing is reported once."""
        self._look()
        events, self._events = self._events, Events()
        self._base_lost = False
        return events

    def _look(self) -> None:
        if self._dialect.events is not None:
            events = self._read(self._dialect.events, self._link.ask(self._dialect.events), answers.number)
            if int(events) & _POWER_ON:
                self._note_power_on()
        entries = self._drain(self._dialect.error)
        self._note(entries)
        self._events.errors += entries
        self._opened = True

    def _note(self, entries: list[tuple[int, str]]) -> None:
        codes = {code for code, _ in entries}
        self._events.tripped |= bool(codes & self._dialect.trip)
        if codes & self._dialect.power_on:
            self._note_power_on()

    def _note_power_on(self) -> None:
        self._events.power_on = True
        self._base_lost = self._opened  # at the first opening nobody has built on anything yet
        self.power_ons += 1

    def _drain(self, query: str) -> list[tuple[int, str]]:
        """The error queue's entries, oldest first, without those the profile ignores; ``query`` begins it."""
        entries: list[tuple[int, str]] = []
        while (entry := self._error_entry(query)) is not None:
            if entry[0] not in self._dialect.ignored:
                entries.append(entry)
            if len(entries) > _LONGEST_QUEUE:
                raise Malformed(f"{self.resource}: the error queue does not end")
            query = self._dialect.error
        return entries

    def _error_entry(self, query: str) -> tuple[int, str] | None:
        undressed = self._dialect.error_reply.undressed
        return self._read(query, self._link.ask(query), lambda reply: answers.error_entry(undressed(reply)))

    def _ask(self, query: Form, reply: Form, channel: int, meaning: Callable[[str], T]) -> T:
        message = query.written(channel=channel)
        return self._read(message, self._link.ask(message), lambda text: meaning(reply.undressed(text, channel)))

    def _read(self, query: str, reply: str, meaning: Callable[[str], T]) -> T:
        """What the reply means; when it means nothing, the `Malformed` says who answered what so."""
        try:
            return meaning(reply)
        except Malformed as error:
            raise Malformed(f"{self.resource}: the reply to {query!r}: {error}") from error
