"""One setpoint from request to result, in the order in which things must happen."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise
from pathlib import Path

import pytest

from tests.controller.bench import HELD, Bench, bench
from tests.promises.witness import Witness
from trapd.errors import BadRequest, Conflict, NotFound
from trapd.record import verify


@pytest.fixture(scope="module")
def holding(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Bench]:
    with bench(tmp_path_factory.mktemp("holding")) as made:
        made.switch_on()
        yield made


def test_a_set_is_recorded_as_request_verdict_ramp_intents_outcomes_and_result(holding: Bench) -> None:
    start = holding.record.last_seq
    holding.ask("set", values={"endcaps": 130.0})
    holding.ask("set", values={"endcaps": 120.0})
    kinds = [entry.kind for entry in holding.entries() if entry.seq > start and entry.kind != "heartbeat"]
    one = kinds[: len(kinds) // 2]
    assert one[:3] == ["request", "verdict", "ramp"]
    assert one[3:-1] == ["intent", "outcome"] * ((len(one) - 4) // 2)
    assert one[-1] == "result"
    assert kinds == one * 2


def test_every_step_was_read_back_and_none_was_larger_than_the_file_allows(holding: Bench) -> None:
    start = holding.record.last_seq
    holding.ask("set", values={"endcaps": 150.0})
    intents = [e.data for e in holding.entries("intent") if e.seq > start]
    outcomes = [e.data for e in holding.entries("outcome") if e.seq > start]
    values = [120.0, *(intent["value"] for intent in intents)]
    assert max(abs(b - a) for a, b in pairwise(values)) <= 5.0 + 1e-9
    assert [outcome["state"] for outcome in outcomes] == ["confirmed"] * len(intents)
    assert all(abs(o["readback"] - i["value"]) < 0.3 for i, o in zip(intents, outcomes, strict=True))
    assert values[-1] == 150.0
    holding.ask("back")


def test_a_refused_value_is_recorded_with_its_reasons_and_nothing_is_sent(holding: Bench) -> None:
    before, start = holding.received(), holding.record.last_seq
    answer = holding.ask("set", values={"endcaps": 1500.0})
    assert answer["accepted"] is False
    assert {reason["rule"] for reason in answer["verdict"]["reasons"]} >= {"limit"}
    assert holding.commands(before) == []
    assert [e.kind for e in holding.entries() if e.seq > start and e.kind != "heartbeat"] == ["request", "verdict"]


def test_back_returns_to_the_state_before_the_last_completed_move(holding: Bench) -> None:
    was = dict(holding.controller.situation.values)
    holding.ask("set", values={"endcaps": 140.0, "rods": 2.0})
    assert holding.controller.situation.values["rods"] == 2.0
    holding.ask("back")
    assert holding.controller.situation.values == was


def test_the_electrodes_of_the_rack_are_where_the_record_says(holding: Bench) -> None:
    holding.ask("set", values={"endcaps": 125.0})
    electrodes = holding.rack.electrodes()
    # Settled means: the lag's residue is under a tenth of the margin, here 0.1 x 5 % x 125 V.
    assert electrodes.voltages_v["dc"][1] == pytest.approx(125.0, abs=0.625)
    # The rack's resonator has its own gain and centre: within the 2 % that the file states.
    assert electrodes.drive_amplitude_v == pytest.approx(260.0, rel=0.02)
    holding.ask("back")


def test_a_frequency_move_holds_the_electrode_amplitude(holding: Bench) -> None:
    start = holding.record.last_seq
    holding.ask("set", values={"drive.frequency": 21.03e6})
    intents = [e.data for e in holding.entries("intent") if e.seq > start]
    # Away from resonance the gain falls: the frequency goes first, then the level rises.
    assert [i["quantity"] for i in intents[:4]] == ["frequency_hz", "level_v"] * 2
    assert holding.rack.electrodes().drive_amplitude_v == pytest.approx(260.0, rel=0.03)
    start = holding.record.last_seq
    holding.ask("back")
    intents = [e.data for e in holding.entries("intent") if e.seq > start]
    assert [i["quantity"] for i in intents[:4]] == ["level_v", "frequency_hz"] * 2


@pytest.mark.parametrize(
    ("fields", "error", "words"),
    [
        ({"values": {"endcap": 1.0}}, BadRequest, "no setpoint 'endcap'"),
        ({"values": {}}, BadRequest, "no setpoint was named"),
    ],
)
def test_a_mistake_is_answered_and_recorded_and_nothing_is_sent(
    holding: Bench, fields: dict[str, object], error: type[Exception], words: str
) -> None:
    before = holding.received()
    with pytest.raises(error, match=words):
        holding.ask("set", **fields)
    assert holding.commands(before) == []
    holding.wait(lambda: holding.entries("result")[-1].data["state"] == "failed")


def test_an_unknown_point_is_named_with_those_there_are(holding: Bench) -> None:
    with pytest.raises(NotFound, match="no point 'home' in the trap file; there are: work"):
        holding.ask("go", point="home")


def test_a_species_that_is_not_in_the_file_cannot_be_held(holding: Bench) -> None:
    from trapd.setpoint import Contents

    with pytest.raises(NotFound, match=r"'9Be\+' is not in the trap file"):
        holding.ask("ions", contents=Contents(presence="held", ions={"9Be+": 1}))


def test_on_is_refused_while_ions_are_held(holding: Bench) -> None:
    with pytest.raises(Conflict, match="only from an empty trap"):
        holding.ask("on")


def test_nothing_that_was_ever_sent_is_a_reset(holding: Bench) -> None:
    assert not [one.text for one in holding.rack.received if "*RST" in one.text.upper()]


def test_the_chain_verifies_after_all_that(holding: Bench) -> None:
    assert verify(holding.path).ok


def test_each_intent_is_on_disk_when_the_rack_receives_its_command(tmp_path: Path) -> None:
    """Promise 2: asked by a read-only connection at the moment of reception, before the rack executes."""
    witness = Witness(tmp_path / "north-bench.sqlite")
    with bench(tmp_path, on_receive=witness) as made:
        made.switch_on()
        made.ask("set", values={"endcaps": 150.0, "drive.frequency": 21.005e6})
        assert witness.orphans == []
        assert len(witness.intents) == len(made.entries("intent")) > 150


def test_a_first_start_on_a_dark_trap_ends_empty_and_sends_queries_only(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.wait_until_empty()
        assert made.commands() == []
        made.wait(lambda: [one.data["presence"] for one in made.entries("contents")] == ["unknown", "none"])
        assert made.entries("contents")[-1].actor == "trapd"


def test_set_before_on_says_what_comes_first(tmp_path: Path) -> None:
    with bench(tmp_path) as made, pytest.raises(Conflict, match="`trapd on` comes first; nothing was sent"):
        made.ask("set", values={"endcaps": 10.0})


def test_declaring_ions_held_is_refused_where_they_could_not_be(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on(held=False)
        made.ask("set", values={"drive.amplitude": 60.0})
        answer = made.ask("ions", contents=HELD)
        assert answer["accepted"] is False
        assert made.controller.situation.contents.presence == "none"
        assert "stability" in {reason["rule"] for reason in answer["verdict"]["reasons"]}
