"""What is in the trap decides whom the guard holds a state to."""

from __future__ import annotations

from dataclasses import replace

import pytest

from tests.guard.benches import (
    NONE,
    SOUTH,
    SOUTH_WORK,
    exact,
    held,
    only,
    ring_amplitude_at,
    rules_of,
    wide,
    with_limit,
)
from trapd.guard import rules
from trapd.guard.contents import watched
from trapd.guard.verdict import judge, judge_move
from trapd.setpoint import AMPLITUDE, FREQUENCY, Contents

LOST = {**SOUTH_WORK, "bias": -19.0}  # radially for both at 300 V
FOR_YTTERBIUM = ring_amplitude_at(0.6, SOUTH.catalogue["171Yb+"], 15e6)  # q = 1.17 for 88Sr+
FREE = replace(exact(wide(SOUTH, amplitude=(0.0, 3000.0))), level_max_v=None)


def names(contents: Contents) -> tuple[list[str], list[str], list[str]]:
    who = watched(SOUTH, contents)
    enforced, incoming, shown = ([one.name for one in group] for group in (who.enforced, who.incoming, who.shown))
    assert [one.name for one in who.everybody] == enforced + incoming + shown
    return enforced, incoming, shown


@pytest.mark.parametrize(
    ("contents", "expected"),
    [
        (held("171Yb+"), (["171Yb+"], [], [])),
        (held("171Yb+", "88Sr+"), (["171Yb+", "88Sr+"], [], [])),
        (NONE, ([], [], ["88Sr+", "171Yb+"])),
        (Contents(presence="unknown"), (["88Sr+", "171Yb+"], [], [])),
        (Contents(presence="unknown", ions={"88Sr+": 2}), (["88Sr+"], [], [])),
        (Contents(presence="loading", incoming=("88Sr+",)), ([], ["88Sr+"], [])),
        (Contents(presence="loading", ions={"171Yb+": 1}, incoming=("88Sr+",)), (["171Yb+"], ["88Sr+"], [])),
        (Contents(presence="loading", ions={"88Sr+": 1}, incoming=("88Sr+",)), (["88Sr+"], [], [])),
    ],
)
def test_who_is_watched(contents: Contents, expected: tuple[list[str], list[str], list[str]]) -> None:
    assert names(contents) == expected


def test_before_anything_was_declared_the_whole_catalogue_is_guarded() -> None:
    verdict = judge(FREE, Contents(presence="unknown"), {**SOUTH_WORK, AMPLITUDE: FOR_YTTERBIUM})
    assert {reason.species for reason in verdict.reasons} >= {"88Sr+"}


def test_after_doubt_only_the_last_held_are_guarded() -> None:
    unknown = Contents(presence="unknown", ions={"171Yb+": 1})
    assert judge(FREE, unknown, {**SOUTH_WORK, AMPLITUDE: FOR_YTTERBIUM}).accepted


def test_an_empty_trap_moves_through_instability_but_not_through_its_limits() -> None:
    verdict, ramp = judge_move(SOUTH, NONE, SOUTH_WORK, LOST)
    assert verdict.accepted
    assert ramp is not None
    assert {reason.rule for reason in verdict.warnings} >= {rules.STABILITY}
    over, none = judge_move(SOUTH, NONE, SOUTH_WORK, {**SOUTH_WORK, "bias": -21.0})
    assert (rules_of(over), none) == ([rules.LIMIT], None)


def test_an_empty_trap_may_cross_a_range_boundary_and_change_a_fixed_frequency() -> None:
    switched = with_limit(SOUTH, "bias", boundaries=(2.0,))
    target = {**SOUTH_WORK, "bias": 3.0, FREQUENCY: 15.5e6}
    assert judge_move(switched, NONE, SOUTH_WORK, target)[0].accepted
    assert not judge_move(switched, held("88Sr+"), SOUTH_WORK, target)[0].accepted


def test_while_loading_the_incoming_species_must_be_stable_at_the_end_of_the_move() -> None:
    """A bias of -19 V suits nobody; at the work point both are stable."""
    loading = Contents(presence="loading", incoming=("88Sr+",))
    verdict, ramp = judge_move(SOUTH, loading, SOUTH_WORK, LOST)
    reason = only(verdict.reasons)
    assert (reason.rule, reason.species, ramp) == (rules.STABILITY, "88Sr+", None)
    back, ramp = judge_move(SOUTH, loading, LOST, SOUTH_WORK)
    assert back.accepted
    assert not back.recovering  # it is not held yet, so nothing was broken
    assert ramp is not None


def test_the_incoming_species_margin_only_warns() -> None:
    """Strontium at 2 % under the edge, the margin is 3 %."""
    near = {**SOUTH_WORK, AMPLITUDE: ring_amplitude_at(0.89, SOUTH.catalogue["88Sr+"], 15e6)}
    verdict = judge(FREE, Contents(presence="loading", incoming=("88Sr+",)), near)
    assert verdict.accepted
    assert {reason.rule for reason in verdict.warnings} == {rules.MARGIN}
    assert not judge(FREE, held("88Sr+"), near).accepted


def test_ions_already_held_stay_guarded_while_others_come() -> None:
    loading = Contents(presence="loading", ions={"171Yb+": 1}, incoming=("88Sr+",))
    verdict, ramp = judge_move(SOUTH, loading, SOUTH_WORK, LOST)
    assert {(reason.rule, reason.species) for reason in verdict.reasons} == {
        (rules.STABILITY, "171Yb+"),
        (rules.STABILITY, "88Sr+"),
    }
    assert ramp is None


def test_on_the_way_back_to_safety_too_the_incoming_species_must_be_stable_at_the_end() -> None:
    """Ytterbium is lost at 40 V and -2 V; at q = 0.6 for it, strontium has q = 1.17."""
    loading = Contents(presence="loading", ions={"171Yb+": 1}, incoming=("88Sr+",))
    weak = {**SOUTH_WORK, "bias": -2.0, AMPLITUDE: 40.0}
    verdict, ramp = judge_move(FREE, loading, weak, {**weak, AMPLITUDE: FOR_YTTERBIUM})
    assert [(reason.rule, reason.species) for reason in verdict.reasons] == [(rules.STABILITY, "88Sr+")]
    assert ramp is None
    assert judge_move(FREE, held("171Yb+"), weak, {**weak, AMPLITUDE: FOR_YTTERBIUM})[0].recovering


def test_what_an_incoming_species_needs_on_the_way_is_not_asked() -> None:
    """From beyond strontium's edge, where ytterbium is held, to the work point."""
    loading = Contents(presence="loading", ions={"171Yb+": 1}, incoming=("88Sr+",))
    start = {**SOUTH_WORK, AMPLITUDE: FOR_YTTERBIUM}
    verdict, ramp = judge_move(FREE, loading, start, SOUTH_WORK)
    assert verdict.accepted
    assert ramp is not None
    assert not judge_move(FREE, held("171Yb+", "88Sr+"), SOUTH_WORK, start)[0].accepted
