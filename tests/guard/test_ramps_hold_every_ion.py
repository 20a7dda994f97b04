"""The promise itself: whatever the guard accepts keeps every ion, whatever is safe by twice the margin is not refused.

Random traps and moves; the judge of the judge is `orbit`, which integrates what may really stand at the electrodes.
``TRAPD_RAMPS=5000`` draws more, ``TRAPD_RAMPS_SEED`` others.
"""

from __future__ import annotations

import os
from collections import Counter
from collections.abc import Iterable
from dataclasses import dataclass, field, replace
from itertools import islice

import numpy as np
import pytest

from tests.guard.orbit import Actual, follow
from tests.guard.random_moves import Move, random_moves
from tests.guard.replay import Replay, straight_way
from trapd.guard import rules
from trapd.guard.verdict import judge_move
from trapd.setpoint import Ramp, Reason

DRAWS = int(os.environ.get("TRAPD_RAMPS", "300"))
SEED = int(os.environ.get("TRAPD_RAMPS_SEED", "20240611"))
WINDOW_RULES = {rules.STABILITY, rules.MARGIN, rules.PATH}
GROWS = 1 + 1e-5  # per period; eigenvalues that meet on the unit circle are good to the root of the integrator's 1e-10


@dataclass
class Tally:
    accepted: int = 0
    refused: Counter[str] = field(default_factory=Counter)
    steps: int = 0
    states: int = 0
    searched: int = 0
    lost: list[str] = field(default_factory=list)
    refused_for_nothing: list[str] = field(default_factory=list)

    def __str__(self) -> str:
        return (
            f"{self.accepted} of {DRAWS} draws accepted, {self.steps} steps, {self.states} states integrated on the ramps; "
            f"refused: {dict(self.refused)}; {self.searched} states integrated to find refusals of safe ways"
        )


@pytest.fixture(scope="module")
def tally() -> Tally:
    result = Tally()
    rng = np.random.default_rng(SEED + 1)
    for number, move in enumerate(islice(random_moves(SEED), DRAWS)):
        verdict, ramp = judge_move(move.model, move.contents, move.present, move.target)
        if not verdict.accepted and rng.random() < 0.7:
            move = _to_the_edge(move, verdict.reasons)
            verdict, ramp = judge_move(move.model, move.contents, move.present, move.target)
        if ramp is not None and not verdict.recovering:
            result.accepted += 1
            _replay(result, number, move, ramp, rng)
        else:
            result.refused.update({reason.rule for reason in verdict.reasons} or {"recovering"})
            if _by_the_window(move, verdict.reasons) and _safe_by_far(result, move):
                result.refused_for_nothing.append(f"draw {number}: {move}: {verdict.reasons}")
    print(result)
    return result


@pytest.mark.long
def test_nothing_accepted_grows_or_leaves_the_first_region(tally: Tally) -> None:
    assert not tally.lost, f"{tally}\n" + "\n".join(tally.lost[:5])
    assert tally.states >= 100 * tally.accepted, str(tally)


@pytest.mark.long
def test_at_least_three_draws_in_ten_are_accepted(tally: Tally) -> None:
    assert tally.accepted >= 0.3 * DRAWS, str(tally)


@pytest.mark.long
def test_nothing_safe_by_twice_the_margin_is_refused_by_the_window(tally: Tally) -> None:
    assert not tally.refused_for_nothing, f"{tally}\n" + "\n".join(tally.refused_for_nothing[:5])
    assert sum(tally.refused[rule] for rule in WINDOW_RULES) > 0.1 * DRAWS, str(tally)


def _to_the_edge(move: Move, reasons: Iterable[Reason]) -> Move:
    """Ask for the very value that a refusal offers (not next to 0 V, where no integrator tells held from lost)."""
    for reason in reasons:
        if reason.nearest is not None and abs(reason.nearest) > 1e-6 * abs(move.present[reason.quantity]):
            return replace(move, target={**move.target, reason.quantity: reason.nearest})
    return move


def _replay(tally: Tally, number: int, move: Move, ramp: Ramp, rng: np.random.Generator) -> None:
    replay = Replay(move, ramp, rng)
    assert replay.told == move.target
    assert all(residue <= 0.1 * (1 + 1e-9) for residue in replay.residues), (number, replay.residues)
    tally.steps += len(ramp.steps)
    for one in move.config.species.values():
        orbits = follow(move.config, one, replay.states)
        tally.states += len(replay.states)
        for index in np.flatnonzero(~orbits.first_region | (orbits.growth > GROWS)):
            tally.lost.append(
                f"draw {number}: {one} leaves or grows ({orbits.growth[index]:.9f} per period) "
                f"at {replay.states[index]}; {move}"
            )


def _by_the_window(move: Move, reasons: Iterable[Reason]) -> bool:
    guard = move.config.guard
    return (
        guard.min_secular_frequency_hz is None
        and guard.min_depth_ev is None
        and bool(reasons := list(reasons))
        and all(reason.rule in WINDOW_RULES for reason in reasons)
    )


def _safe_by_far(tally: Tally, move: Move) -> bool:
    """Whether in some order the whole straight way is safe with twice the margin; looked at ever more closely."""
    moved = frozenset(name for name in move.target if move.target[name] != move.present[name])
    if not moved:
        return False
    for samples in (2, 5, 33):
        known: dict[tuple[frozenset[str], str], bool] = {}
        if not _order(tally, move, moved, samples, known):
            return False
    return True


def _order(
    tally: Tally, move: Move, rest: frozenset[str], samples: int, known: dict[tuple[frozenset[str], str], bool]
) -> bool:
    for name in sorted(rest):
        values = {other: (move.present if other in rest else move.target)[other] for other in move.target}
        if (rest, name) not in known:
            states = list(straight_way(move, values, name, move.target[name], samples))
            known[rest, name] = _all_safe(tally, move, states) and (
                len(rest) == 1 or _order(tally, move, rest - {name}, samples, known)
            )
        if known[rest, name]:
            return True
    return not rest


def _all_safe(tally: Tally, move: Move, states: list[Actual]) -> bool:
    for one in move.config.species.values():
        tally.searched += len(states)
        if not follow(move.config, one, states).first_region.all():
            return False
    return True
