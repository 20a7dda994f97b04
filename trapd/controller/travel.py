"""A move on its way: each intent durable, then sent, read back and compared, then its wait."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from concurrent.futures import Future
from contextlib import suppress

from trapd.controller.activity import Activity, Part, Pause
from trapd.controller.carry_out import Carried, carry_out
from trapd.controller.desk import Desk
from trapd.controller.drafts import outcome_draft
from trapd.controller.looking import follow_darkness, looking
from trapd.controller.registering import Origin
from trapd.controller.situation import Moving
from trapd.errors import InstrumentUnreachable, NotConfirmed, RecordFailed, Superseded, TrapdError
from trapd.guard.ramp import settle_s
from trapd.record import Draft, Entry
from trapd.setpoint import AMPLITUDE, FREQUENCY, Outcome, Ramp
from trapd.wiring import DRIVE_OUTPUT, Command, output_of

ARRIVED = ("confirmed", "differs")
"""Outcome states after which a move goes on."""


def expand(desk: Desk, ramp: Ramp) -> Iterator[Command]:
    """What the instruments are told for a whole ramp, made as it is needed: a ramp may have very many steps."""
    values, start = ramp.start, ramp.start
    for number, step in enumerate(ramp.steps, start=1):
        if number > 1 and step.setpoint != ramp.steps[number - 2].setpoint:
            start = values
        after = {**values, step.setpoint: step.value}
        settle = settle_s(desk.model, after, step.setpoint, abs(step.value - start[step.setpoint]))
        yield from desk.wiring.commands(desk.model, values, step, number, settle)
        values = after


def run(desk: Desk, origin: Origin, commands: Iterable[Command], steps: int = 0) -> Part:
    """Carry out each command in turn. The outcome of one is committed together with the intent of the next."""
    yield from desk.wait_until_rested()
    upcoming = iter(commands)
    command = next(upcoming, None)
    intent: int | None = None
    if command is not None:
        intent = yield from commit_next(desk, origin, [], origin.intent(command.intent, command.step))
    while command is not None and intent is not None:
        _tell_moving(desk, origin, command, steps)
        carried: Carried = yield from _send(desk, origin, command, intent)
        happened = [outcome_draft(origin.author, intent, carried.outcome)]
        following = next(upcoming, None) if carried.outcome.state in ARRIVED else None
        if following is None:
            with suppress(RecordFailed):  # it has happened all the same, and is kept
                yield desk.note(*happened)
            _raise_unless_arrived(command, carried.outcome)
            intent = None
        else:
            intent = yield from commit_next(desk, origin, happened, origin.intent(following.intent, following.step))
        yield from _wait(desk, origin, command, carried.at_ns, intent)
        command = following


def _wait(desk: Desk, origin: Origin, command: Command, at_ns: int, intent: int | None) -> Part:
    """The rest of the command's waiting time; the next ``intent`` is on disk already."""
    remaining_ns = at_ns + int(command.wait_s * 1e9) - desk.clock.monotonic_ns()
    if remaining_ns <= 0:
        return
    try:
        yield Pause(remaining_ns / 1e9)
    except Superseded as error:
        if intent is not None:
            desk.note(outcome_draft(origin.author, intent, Outcome(state="not sent", error=str(error))))
        raise


def commit_next(desk: Desk, origin: Origin, happened: Sequence[Draft], intent: Draft) -> Part:
    """What happened and the intent that follows, in one commit; the intent's seq. What happened is never lost; without the
    commit nothing follows."""
    future = desk.record.append(*happened, intent)
    try:
        entries: tuple[Entry, ...] = yield future
    except Superseded as error:
        desk.spawn(_withdraw(desk, origin, future, happened, str(error)), to_the_end=True)
        raise
    except TrapdError:
        if happened:
            desk.note(*happened)
        raise
    return entries[-1].seq


def _withdraw(
    desk: Desk, origin: Origin, future: Future[tuple[Entry, ...]], happened: Sequence[Draft], why: str
) -> Activity:
    """The last intent was being written when the move was stopped: say that it was not sent."""
    try:
        entries = yield future
    except TrapdError:
        if happened:
            desk.note(*happened)
        return {}
    desk.note(outcome_draft(origin.author, entries[-1].seq, Outcome(state="not sent", error=why)))
    return {}


def _send(desk: Desk, origin: Origin, command: Command, intent: int) -> Part:
    instrument, setpoint = command.intent.instrument, command.intent.setpoint
    live = command.intent.quantity != "output" and desk.situation.outputs.get(output_of(setpoint), False)
    # Until the instrument has it nobody knows when it settles; a later `rest` can only extend this.
    desk.rest(max(command.wait_s, command.settle_s), desk.clock.monotonic_ns())
    job: Future[Carried] = desk.submit(instrument, carry_out(command, desk.clock, live=live))
    sent = desk.sent[instrument]
    try:
        carried: Carried = yield job
    except Superseded as error:
        # The command may be on its way: whatever comes of it is still written down, whenever it comes.
        desk.spawn(_late_outcome(desk, origin, command, intent, job, sent, str(error)), to_the_end=True)
        raise
    take_over(desk, command, carried)
    return carried


def _late_outcome(
    desk: Desk, origin: Origin, command: Command, intent: int, job: Future[Carried], sent: int, why: str
) -> Activity:
    try:
        carried: Carried = yield job
    except Superseded:  # the job was taken out of the instrument's queue before it began
        desk.note(outcome_draft(origin.author, intent, Outcome(state="not sent", error=why)))
        return {}
    if desk.sent[command.intent.instrument] == sent:  # else something was sent after it, `off` perhaps
        take_over(desk, command, carried)
    if carried.outcome.state not in ARRIVED:
        desk.change(doubt=(*desk.situation.doubt, f"{command.intent.setpoint}: {carried.outcome.error}"))
        desk.spawn(looking(desk))
    desk.note(outcome_draft(origin.author, intent, carried.outcome))
    return {}


def take_over(desk: Desk, command: Command, carried: Carried) -> None:
    """What this outcome says about the present state."""
    desk.rest(max(command.wait_s, command.settle_s), carried.at_ns)
    if carried.outcome.state not in ARRIVED:
        return
    situation, intent = desk.situation, command.intent
    if intent.quantity == "output":
        values = situation.values
        if not intent.level:
            silent = AMPLITUDE if intent.setpoint == DRIVE_OUTPUT else intent.setpoint.removesuffix(".output")
            values = {**values, silent: 0.0}
        desk.change(outputs={**situation.outputs, intent.setpoint: bool(intent.level)}, values=values)
        follow_darkness(desk)
        return
    # A value told to an output that is off stands nowhere yet; the drive frequency is what it is.
    live = intent.setpoint == FREQUENCY or situation.outputs.get(output_of(intent.setpoint), False)
    desk.change(values={**situation.values, intent.setpoint: intent.value if live else 0.0})


def _raise_unless_arrived(command: Command, outcome: Outcome) -> None:
    if outcome.state in ARRIVED:
        return
    kind = InstrumentUnreachable if outcome.state == "unreachable" else NotConfirmed
    raise kind(f"{command.intent.instrument}: {outcome.error}; the move stopped there, the outputs hold")


def _tell_moving(desk: Desk, origin: Origin, command: Command, steps: int) -> None:
    moving = Moving(
        request=origin.request,
        author=origin.author,
        setpoint=command.intent.setpoint,
        step=command.step,
        steps=steps,
    )
    desk.change(moving=moving)
