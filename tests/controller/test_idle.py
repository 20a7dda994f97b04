"""While nothing moves: the instruments are looked at, and what `off` did can be asked of the record."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.controller.bench import Bench, bench
from trapd.controller import controller
from trapd.record import Reader
from trapd_simulated import Fault, FaultKind


@pytest.fixture(autouse=True)
def _often(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(controller, "IDLE_LOOK_S", 0.2)


def found(made: Bench) -> list[list[str]]:
    return [entry.data["differences"] for entry in made.entries("found") if entry.data.get("differences")]


def test_a_front_panel_change_is_found_without_anybody_asking_and_written_once(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.front_panel("dc", "SOUR1:VOLT 180")
        words = ["endcaps reads 180 V, last commanded 120 V"]
        made.wait(lambda: words in found(made))
        looks = made.received()
        made.wait(lambda: made.received() > looks + 60)  # some looks later
        assert found(made).count(words) == 1
        assert made.controller.situation.values["endcaps"] == 180.0
        assert made.controller.situation.doubt == tuple(words), "nobody has looked at it yet"
        assert made.commands(looks) == []


def test_an_instrument_that_is_gone_and_comes_back_is_noticed_both_times(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.inject("dc", Fault(kind=FaultKind.HANG))
        made.wait(lambda: set(made.controller.situation.unreachable) == {"dc"})
        made.rack.clear("dc")
        made.wait(lambda: made.controller.situation.unreachable == {})


def test_after_off_the_record_says_that_every_output_is_off(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.ask("off")
        with Reader.open(made.path) as reader:
            outputs = reader.state_at().outputs
            off = reader.entries(kind="off", newest=True)[-1]
        assert set(outputs) == {"drive.output", "endcaps.output", "rods.output", "shim_x.output"}
        assert {(one.value, one.state, one.request) for one in outputs.values()} == {(0.0, "confirmed", off.seq)}


def test_an_output_that_did_not_confirm_off_is_not_called_off(tmp_path: Path) -> None:
    with bench(tmp_path) as made:
        made.switch_on()
        made.rack.inject("dc", Fault(kind=FaultKind.HANG))
        made.ask("off")
        with Reader.open(made.path) as reader:
            outputs = reader.state_at().outputs
        assert outputs["drive.output"].state == "confirmed"
        assert outputs["endcaps.output"].state == "not confirmed"
        assert outputs["endcaps.output"].error is not None
