"""Deliberate mistakes, each of which the tests named beside it must catch. `test_mutations.py` makes them one at a time.

``old`` stands exactly once in ``file`` and becomes ``new``; a list that no longer fits the code fails too.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, kw_only=True)
class Mutation:
    name: str
    file: str
    old: str
    new: str
    caught_by: tuple[str, ...]


MUTATIONS = (
    Mutation(
        name="the margin widens the allowed interval",
        file="trapd/guard/allowed.py",
        old="scale = 1 - model.margin if edge >= 0 else 1 + model.margin",
        new="scale = 1 + model.margin if edge >= 0 else 1 - model.margin",
        caught_by=("tests/guard/test_allowed.py",),
    ),
    Mutation(
        name="folded for unfolded beta",
        file="trapd/physics/krein.py",
        old="    return np.minimum(lower, upper), positive\n",
        new="""    from trapd.physics.collocation import half_period

    folded = np.linalg.eigvals(half_period(c.a, c.q).sin2)
    bounded = ((folded.real > 0) & (folded.real < 1) & (abs(folded.imag) < 1e-9)).all(axis=1)
    return np.where(bounded, 1.0, -1.0), np.ones(len(c.a), dtype=bool)
""",
        caught_by=("tests/physics/test_first_region.py", "tests/physics/test_worked_cases.py"),
    ),
    Mutation(
        name="only the first species is judged",
        file="trapd/guard/contents.py",
        old="held = tuple(model.catalogue[name] for name in contents.ions)",
        new="held = tuple(model.catalogue[name] for name in contents.ions)[:1]",
        caught_by=("tests/guard/test_contents.py",),
    ),
    Mutation(
        name="a stretch is judged at its ends only",
        file="trapd/guard/leg.py",
        old="if any(i.low <= low + slack and i.high >= high - slack for i in intervals):",
        new="if all(any(i.low <= end + slack and i.high >= end - slack for i in intervals) for end in (low, high)):",
        caught_by=("tests/guard/test_path.py",),
    ),
    Mutation(
        name="the intent is sent before it is committed",
        file="trapd/record/writer.py",
        old="                self._file.commit(batch.rows, batch.head)\n",
        new="""                for append, entries in batch.answers:
                    append.answer.set_result(entries)
                batch_answers, batch.answers = batch.answers, []
                __import__("time").sleep(0.02)
                self._file.commit(batch.rows, batch.head)
""",
        caught_by=("tests/controller/test_path_of_a_setpoint.py",),
    ),
    Mutation(
        name="the chain forgets the previous digest",
        file="trapd/record/entry.py",
        old="first, previous = head.seq + 1, head.digest",
        new="first, previous = head.seq + 1, NO_DIGEST",
        caught_by=("tests/record/test_entry.py", "tests/record/test_verify.py"),
    ),
    Mutation(
        name="off waits for the ramp in hand",
        file="trapd/controller/controller.py",
        old='        self._supersede("off came first")\n',
        new="""        if self._current is not None:
            self.schedule(0.01, lambda: self._off(ticket))
            return
        self._supersede("off came first")
""",
        caught_by=("tests/controller/test_faults.py",),
    ),
    Mutation(
        name="the gain is taken for exact",
        file="trapd/guard/limits.py",
        old="    low, high = band(model.resonator, low_hz, high_hz)\n",
        new="    low, high = 1.0, 1.0\n",
        caught_by=("tests/guard/test_limits.py",),
    ),
    Mutation(
        name="a readback is never compared",
        file="trapd/controller/carry_out.py",
        old="if abs(difference) <= command.accuracy:",
        new="if difference == difference:",
        caught_by=("tests/controller/test_faults.py",),
    ),
    Mutation(
        name="a start commands the instruments",
        file="trapd/controller/adoption.py",
        old="        surveys = yield from look(desk)\n",
        new="""        surveys = yield from look(desk)
        yield desk.workers[desk.wiring.drive].submit(lambda source: source.set_output(False))  # type: ignore[attr-defined]
""",
        caught_by=("tests/controller/test_path_of_a_setpoint.py",),
    ),
)
