"""What every SCPI instrument shares: asking, setting with an error check, and events that are reported exactly once."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import AbstractContextManager, contextmanager
from dataclasses import dataclass, field

from trapd_drivers.errors import InstrumentRefused, Malformed
from trapd_drivers.form import Form
from trapd_drivers.interfaces import Identity
from trapd_drivers.link import Link
from trapd_drivers.profile import OutputDialect, Profile, TripDialect
from trapd_drivers.quantity import Reading
from trapd_drivers.scpi import answers

_POWER_ON = 128  # bit 7 of the standard event status register, IEEE 488.2-1992 11.5.1 [mem]
_LONGEST_QUEUE = 256


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
        reply = self._link.read_identity()
        with self._named(self._dialect.identity):
            return answers.identity(reply)

    def read_number(self, reading: Reading, *, query: Form | None = None, channel: int = 0) -> float:
        """The SI value that the reading's query tells, or another ``query`` with replies of the same kind."""
        query = query or reading.query
        text = self._ask(query, reading.reply, channel)
        with self._named(query.text):
            return reading.unit.to_si(answers.number(text))

    def read_output(self, query: Form, output: OutputDialect, channel: int = 0) -> bool:
        word = self._ask(query, output.reply, channel).upper()
        if word not in output.on_words | output.off_words:
            raise Malformed(f"{self.resource}: {query.text!r} was answered by {word!r}, neither on nor off")
        return word in output.on_words

    def read_trip(self, trip: TripDialect, channel: int = 0) -> bool:
        return self._ask(trip.query, trip.reply, channel).upper() in trip.words

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
            reply = self._link.ask(self._dialect.events)
            with self._named(self._dialect.events):
                if int(answers.number(reply)) & _POWER_ON:
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
        reply = self._link.ask(query)
        with self._named(query):
            return answers.error_entry(self._undressed(reply, self._dialect.error_reply))

    def _ask(self, query: Form, reply: Form, channel: int) -> str:
        message = query.written(channel=channel)
        answer = self._link.ask(message)
        with self._named(message):
            return self._undressed(answer, reply, channel)

    def _undressed(self, answer: str, reply: Form, channel: int = 0) -> str:
        found = reply.found(answer, channel=channel)
        if found is None:
            raise Malformed(f"{answer[:80]!r} does not read {reply.text!r}")
        return found

    @contextmanager
    def _named(self, query: str) -> Iterator[None]:
        """Say in a `Malformed` who answered what so."""
        try:
            yield
        except Malformed as error:
            raise Malformed(f"{self.resource}: the reply to {query!r}: {error}") from error
