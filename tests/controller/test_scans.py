"""A scan in the controller: judged once, each point on disk before its burst, the tickle off however it ends."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise
from pathlib import Path

import pytest

from tests.controller.bench import SCANNED, Bench, bench
from tests.promises.witness import Witness
from trapd.errors import Conflict, InstrumentUnreachable, NotConfirmed, NotFound, Superseded
from trapd.record import Reader, verify
from trapd.setpoint import Contents, Due, Request
from trapd_simulated import Rack, RackSettings

ONE = Contents(presence="held", ions={"40Ca+": 1})
LONG = SCANNED.replace('target = "50 Hz"', 'target = "1 Hz"\npasses = 300')
"""A scan that would go on for minutes."""


def hold(made: Bench) -> None:
    made.switch_on(held=False)
    made.rack.load_ion()
    made.ask("ions", contents=ONE)


@pytest.fixture(scope="module")
def scanned(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Bench]:
    """One whole scan, looked at by the tests that follow."""
    folder = tmp_path_factory.mktemp("scanned")
    witness = Witness(folder / "north-bench.sqlite")
    with bench(folder, SCANNED, on_receive=witness) as made:
        hold(made)
        made.before = made.received()  # type: ignore[attr-defined]
        made.answer = made.ask("scan", scan="x")  # type: ignore[attr-defined]
        made.truth_hz = made.rack.spectrum("x")  # type: ignore[attr-defined]
        made.witness = witness  # type: ignore[attr-defined]
        yield made


def test_a_scan_finds_the_frequency_of_the_orbit_within_its_uncertainty(scanned: Bench) -> None:
    finding = scanned.answer["finding"]  # type: ignore[attr-defined]
    assert finding["state"] == "found", finding["message"]
    assert finding["uncertainty_hz"] <= 50.0
    # Five standard uncertainties: one such test in a million fails by chance.
    assert abs(finding["frequency_hz"] - scanned.truth_hz) < 5 * finding["uncertainty_hz"]  # type: ignore[attr-defined]


def test_the_measured_frequency_is_not_the_predicted_one(scanned: Bench) -> None:
    """The simulated resonator's gain is not what the trap file says, or the scan would prove nothing."""
    finding = scanned.answer["finding"]  # type: ignore[attr-defined]
    assert abs(finding["frequency_hz"] - finding["predicted_hz"]) > 10 * finding["uncertainty_hz"]


def test_every_burst_had_its_intent_on_disk_when_the_rack_received_it(scanned: Bench) -> None:
    witness: Witness = scanned.witness  # type: ignore[attr-defined]
    assert witness.orphans == []
    assert witness.bursts > 50


def test_points_intents_and_bursts_agree(scanned: Bench) -> None:
    points = [one.data for one in scanned.entries("scan_point")]
    bursts = [one for one in scanned.entries("intent") if one.data["quantity"] == "burst"]
    tickled = [one for one in points if one["intent"] is not None]
    assert [one["intent"] for one in tickled] == [one.seq for one in bursts]
    assert [one["frequency_hz"] for one in tickled] == [one.data["value"] for one in bursts]
    assert len(bursts) == scanned.witness.bursts  # type: ignore[attr-defined]
    outcomes = {one.data["intent"]: one.data["state"] for one in scanned.entries("outcome")}
    assert {outcomes[one.seq] for one in bursts} == {"confirmed"}


def test_all_bursts_are_inside_the_judged_envelope(scanned: Bench) -> None:
    plan = scanned.entries("plan")[0].data
    for one in (e.data for e in scanned.entries("intent") if e.data["quantity"] == "burst"):
        assert plan["low_hz"] <= one["value"] <= plan["high_hz"]
        assert one["level"] <= plan["level_v"] == pytest.approx(0.5e-3)
        assert one["burst_s"] == pytest.approx(0.52)


def test_there_are_counts_with_the_tickle_off_before_and_between(scanned: Bench) -> None:
    off = [n for n, one in enumerate(scanned.entries("scan_point")) if one.data["frequency_hz"] is None]
    assert off[:3] == [0, 1, 2]
    assert max(b - a for a, b in pairwise(off)) <= 13


def test_the_order_of_the_points_is_neither_up_nor_down_nor_the_same_twice(scanned: Bench) -> None:
    passes: dict[int, list[float]] = {}
    for one in (e.data for e in scanned.entries("scan_point") if e.data["frequency_hz"] is not None):
        passes.setdefault(one["pass_number"], []).append(one["frequency_hz"])
    assert len(passes) >= 2
    for frequencies in passes.values():
        rising = sum(b > a for a, b in pairwise(frequencies))
        assert 0.25 * len(frequencies) < rising < 0.75 * len(frequencies)
    assert len({tuple(one) for one in passes.values()}) == len(passes)


def test_the_tickle_is_off_afterwards_and_the_record_says_so(scanned: Bench) -> None:
    assert scanned.rack.electrodes().rf_outputs["tickle"] is False
    last = [one.data for one in scanned.entries("intent")][-1]
    assert (last["setpoint"], last["value"], last["request"]) == ("tickle.output", 0.0, scanned.answer["entry"])  # type: ignore[attr-defined]


def test_the_secular_frequency_stands_in_its_table_with_all_that_belongs_to_it(scanned: Bench) -> None:
    finding = scanned.answer["finding"]  # type: ignore[attr-defined]
    with Reader.open(scanned.path) as reader:
        row = reader.secular_frequencies()[0]
    assert (row.scan, row.species, row.mode, row.who) == ("x", "40Ca+", "x", "ada")
    assert (row.frequency_hz, row.uncertainty_hz) == (finding["frequency_hz"], finding["uncertainty_hz"])
    assert row.low_95_hz < row.frequency_hz < row.high_95_hz
    assert (row.finding, row.request) == (finding["seq"], scanned.answer["entry"])  # type: ignore[attr-defined]
    measured = scanned.controller.situation.measured["x"]
    assert measured.frequency_hz == row.frequency_hz
    assert verify(scanned.path).ok


def test_nothing_but_tickle_and_counter_was_told_anything(scanned: Bench) -> None:
    told = {
        one.instrument for one in scanned.rack.received_after(scanned.before + 1) if "?" not in one.text.split(";")[0]
    }  # type: ignore[attr-defined]
    assert told == {"tickle", "counter"}


@pytest.fixture
def holding(tmp_path: Path) -> Iterator[Bench]:
    with bench(tmp_path, LONG) as made:
        hold(made)
        yield made


def begin(made: Bench, author: str = "ada", **fields: object) -> object:
    """A scan that is on its way: its first burst has been sent."""
    before = made.received()
    request = Request(kind="scan", author=author, why="test", scan="x", **fields)  # type: ignore[arg-type]
    ticket = made.controller.submit(request)
    ticket.recorded.result(30)
    made.wait(lambda: any("INIT" in m.text and m.instrument == "tickle" for m in made.rack.received_after(before)))
    return ticket


def is_silent(made: Bench) -> bool:
    return not made.rack.electrodes().rf_outputs["tickle"]


@pytest.mark.parametrize("kind", ["stop", "off"])
def test_stop_and_off_end_a_scan_with_the_tickle_off(holding: Bench, kind: str) -> None:
    ticket = begin(holding)
    holding.ask(kind)
    with pytest.raises(Superseded):
        ticket.done.result(10)  # type: ignore[attr-defined]
    holding.wait(lambda: is_silent(holding) and holding.entries("result")[-1].data["state"] == "stopped")
    holding.wait(lambda: open_intents(holding) == [])
    assert verify(holding.path).ok


def open_intents(made: Bench) -> list[int]:
    answered = {one.data["intent"] for one in made.entries("outcome")}
    return [one.seq for one in made.entries("intent") if one.seq not in answered]


def test_a_person_stops_a_scheduled_scan_just_by_asking(holding: Bench) -> None:
    due = Due(schedule="x", scan="x", due_us=holding.controller._desk.clock.now_us())
    ticket = begin(holding, author="schedule", due=due)
    assert holding.ask("set", values={"endcaps": 125.0})["state"] == "done"
    with pytest.raises(Superseded, match="ada asked for something else"):
        ticket.done.result(10)  # type: ignore[attr-defined]
    assert is_silent(holding)
    run = holding.entries("due_run")[-1].data
    assert (run["state"], run["schedule"]) == ("run", "x")


def test_another_persons_scan_goes_on_unless_interrupt_is_said(holding: Bench) -> None:
    ticket = begin(holding, author="ben")
    with pytest.raises(Conflict, match=r"ben is scanning x \(test\); --interrupt stops that; nothing was sent"):
        holding.ask("set", values={"endcaps": 125.0})
    assert holding.controller.situation.scanning is not None
    assert holding.ask("set", values={"endcaps": 125.0}, interrupt=True)["state"] == "done"
    with pytest.raises(Superseded):
        ticket.done.result(10)  # type: ignore[attr-defined]


def test_a_late_due_run_is_recorded_as_late_in_the_commit_of_its_request(holding: Bench) -> None:
    due = Due(schedule="x", scan="x", due_us=holding.controller._desk.clock.now_us() - 60_000_000)
    begin(holding, author="schedule", due=due)
    run = holding.entries("due_run")[-1]
    assert run.data["state"] == "late"
    assert run.data["late_s"] == pytest.approx(60.0, abs=5.0)
    request = next(e for e in holding.entries("request") if e.seq == run.data["request"])
    assert (request.time_us, request.data["kind"]) == (run.time_us, "scan")


def test_without_photons_nothing_is_tickled(tmp_path: Path) -> None:
    with bench(tmp_path, SCANNED) as made:
        made.switch_on(held=False)
        made.ask("ions", contents=ONE)  # said, but nobody was loaded
        with pytest.raises(Conflict, match="counts a second are below the floor of 500"):
            made.ask("scan", scan="x")
        assert not [m for m in made.rack.received if m.instrument == "tickle" and "INIT" in m.text]


def test_an_ion_lost_during_a_scan_is_never_fitted_and_never_called_gone(holding: Bench) -> None:
    ticket = begin(holding)
    holding.rack.lose_ion()
    finding = ticket.done.result(30)["finding"]  # type: ignore[attr-defined]
    assert finding["state"] == "vanished"
    assert "counts_vanished" in finding["flags"]
    assert is_silent(holding)
    assert holding.controller.situation.contents.presence == "held"
    assert holding.entries("secular_frequency") == []
    assert [one.data["condition"] for one in holding.entries("alarm")] == ["counts vanished"]
    assert holding.rack.electrodes().rf_outputs["rf"] is True


def test_a_scan_of_a_state_that_breaks_a_rule_is_refused_and_recorded(tmp_path: Path) -> None:
    with bench(tmp_path, SCANNED.replace('tickle = "0.5 mV"', 'tickle = "15 mV"').replace("20 mV", "15 mV")) as made:
        hold(made)
        made.rack.front_panel("rf", "VOLT 2.0")  # somebody turns the drive down: no longer min_depth
        answer = made.ask("scan", scan="x")
        assert answer["accepted"] is False
        assert {one["rule"] for one in answer["verdict"]["reasons"]} & {
            "min_depth",
            "margin",
            "stability",
            "min_secular_frequency",
        }
        assert not [m for m in made.rack.received if m.instrument == "tickle" and "INIT" in m.text]


def test_who_is_not_held_is_not_scanned(tmp_path: Path) -> None:
    with bench(tmp_path, SCANNED) as made:
        made.switch_on(held=False)
        with pytest.raises(Conflict, match="contents are none"):
            made.ask("scan", scan="x")
        with pytest.raises(NotFound, match="no scan 'w' in the trap file; there are: x; nothing was sent"):
            made.ask("scan", scan="w")


def test_a_dead_counter_ends_the_scan_with_the_tickle_off(holding: Bench) -> None:
    ticket = begin(holding)
    holding.rack.inject("counter", "hang")
    with pytest.raises(InstrumentUnreachable, match="counter"):
        ticket.done.result(30)  # type: ignore[attr-defined]
    holding.wait(lambda: is_silent(holding))
    holding.wait(lambda: open_intents(holding) == [])


def test_a_dead_tickle_ends_its_burst_by_itself_and_is_told_off_when_it_answers_again(holding: Bench) -> None:
    ticket = begin(holding)
    holding.rack.inject("tickle", "hang")
    with pytest.raises((InstrumentUnreachable, NotConfirmed)):
        ticket.done.result(30)  # type: ignore[attr-defined]
    holding.wait(lambda: holding.controller.situation.off_pending == ("tickle",))
    holding.wait(lambda: holding.rack.electrodes().levels_v["tickle"] == 0.0)  # nobody told it
    with pytest.raises((Conflict, InstrumentUnreachable)):
        holding.ask("scan", scan="x")
    holding.rack.clear("tickle")
    holding.wait(lambda: holding.controller.situation.off_pending == () and is_silent(holding))


def test_a_tickle_that_takes_another_value_emits_nothing(holding: Bench) -> None:
    holding.rack.inject("tickle", "ignore_commands")
    before = holding.received()
    with pytest.raises(NotConfirmed, match="no burst was started"):
        holding.ask("scan", scan="x")
    assert not [m for m in holding.rack.received_after(before) if m.instrument == "tickle" and "INIT" in m.text]


def test_a_front_panel_change_ends_the_scan_between_its_passes(holding: Bench) -> None:
    ticket = begin(holding)
    holding.rack.front_panel("dc", "VOLT 140")
    with pytest.raises(Conflict, match="no longer as judged"):
        ticket.done.result(60)  # type: ignore[attr-defined]
    holding.wait(lambda: is_silent(holding))


def test_a_start_tells_the_tickle_off_and_nothing_else_anything(tmp_path: Path) -> None:
    with Rack(RackSettings(), seed=1) as rack:
        rack.front_panel("tickle", "FREQ 2155000")
        rack.front_panel("tickle", "VOLT 0.001")
        rack.front_panel("tickle", "OUTP ON")
        with bench(tmp_path, SCANNED, rack=rack) as made:
            assert is_silent(made)
            assert made.commands() == ["OUTP OFF;:SYST:ERR?"]
            assert [e.data["tickling"] for e in made.entries("found") if "tickling" in e.data] == [True]
            made.wait(lambda: bool(made.entries("outcome")))
            switched = made.entries("intent")[0].data
            assert (switched["setpoint"], switched["value"], switched["why"]) == ("tickle.output", 0.0, "after a start")
