"""The kit on every registered driver in every dialect, and the kit on drivers that break one clause each."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from concurrent.futures import Future, ThreadPoolExecutor
from contextlib import closing, suppress
from dataclasses import dataclass
from typing import Any, cast

import pytest

from tests.drivers.broken import BROKEN
from tests.drivers.broken_courses import BROKEN_COURSES
from tests.drivers.rack import DIALECTS, PLAIN, resource
from trapd_drivers import conformance
from trapd_drivers.absent import AbsentDcSupply, AbsentGauge, AbsentPhotonCounter, AbsentRfSource
from trapd_drivers.conformance import Bench, Report
from trapd_drivers.conformance.__main__ import main
from trapd_drivers.conformance.controls import Settings, knobs, switches
from trapd_drivers.errors import DriverError
from trapd_drivers.interfaces import DcSupply, Gauge, Instrument, PhotonCounter, RfSource, Scale
from trapd_drivers.registry import DriverClass, driver_class, driver_names
from trapd_drivers.scpi.dc_supply import ScpiDcSupply
from trapd_drivers.scpi.gauge import ScpiGauge
from trapd_drivers.scpi.photon_counter import ScpiPhotonCounter
from trapd_drivers.scpi.rf_source import ScpiRfSource
from trapd_simulated import Rack

BENCHES = {"scpi-rf-source": "rf", "scpi-dc-supply": "dc", "scpi-photon-counter": "counter", "scpi-gauge": "vacuum"}
"""The rack's instrument for each registered driver. One that is missing here fails below: silence is no conformance."""

COMMON, VALUES, CHANNELS = set(range(1, 9)), set(range(9, 15)), {15, 16}
BURSTS, COUNTS, GAUGES = set(range(17, 21)), set(range(21, 25)), {25}
TRIED = {
    "scpi-rf-source": COMMON | VALUES | BURSTS,
    "scpi-dc-supply": COMMON | VALUES | CHANNELS,
    "scpi-photon-counter": COMMON | COUNTS,
    "scpi-gauge": COMMON | GAUGES,
}
ALL_BROKEN = (*BROKEN, *BROKEN_COURSES)
CANNOT = {"other": {14}, "third": BURSTS}  # these dialects have no measurement, and no bursts
TIMEOUTS_S = (0.25, 1.0)
"""Of the driver. What is not as expected is examined once more with time for a machine that is busy with something else."""


Key = tuple[str | type[Instrument], str]  # a driver, the name of one or of a stand-in, and a profile
Reports = dict[Key, Future[Report]]


@dataclass(frozen=True)
class StandIn:
    """A stand-in whose instrument has come: before that it knows no limits and cannot refuse without asking."""

    absent: type[AbsentRfSource | AbsentDcSupply | AbsentPhotonCounter | AbsentGauge]
    driver: DriverClass

    def open(self, resource: str, *, profile: str = "plain", timeout_s: float = 1.0) -> Instrument:
        def open_() -> Instrument:
            return self.driver.open(resource, profile=profile, timeout_s=timeout_s)

        found = self.absent(resource, open_, self.driver.scales(profile))
        found.read_identity()
        return found

    def scales(self, profile: str) -> Mapping[tuple[str, int], Scale]:
        return self.driver.scales(profile)


STAND_INS = {
    "rf": StandIn(AbsentRfSource, ScpiRfSource),
    "dc": StandIn(AbsentDcSupply, ScpiDcSupply),
    "counter": StandIn(AbsentPhotonCounter, ScpiPhotonCounter),
    "vacuum": StandIn(AbsentGauge, ScpiGauge),
}
ON = {RfSource: "rf", DcSupply: "dc", PhotonCounter: "counter", Gauge: "vacuum"}


def examined(driver: DriverClass, on: str, profile: str, fails: tuple[int, ...]) -> Report:
    """The report of a full run; and proof that what a conforming driver's run found it also left."""
    report = Report(driver="none was opened", resource="", results=())
    for timeout_s in TIMEOUTS_S:
        with Rack(DIALECTS[profile]) as rack, suppress(DriverError):
            bench = Bench(
                driver=driver, resource=resource(rack, on), profile=profile, timeout_s=timeout_s, allow_output=True
            )
            before = None if fails else stirred(bench)
            report = conformance.run(bench)
            if before is not None:
                with closing(bench.open(timeout_s=5.0)) as instrument:
                    assert before.hold_at(instrument), report
        if report.results and report.clauses("fail") == fails:
            break
    return report


def stirred(bench: Bench) -> Settings:
    """The settings of an instrument that is in use, output on."""
    with closing(bench.open(timeout_s=5.0)) as instrument:
        for knob in knobs(instrument):
            knob.set(knob.small(0.1))
        for switch in switches(instrument):
            switch.set(True)
        return Settings.of(instrument)


@pytest.fixture(scope="module")
def reports() -> Iterator[Reports]:
    """All runs, each with a rack of its own; they mostly wait, so they wait together."""
    runs: dict[Key, tuple[object, str, str, tuple[int, ...]]] = {
        **{(broken, "plain"): (broken, on(broken), "plain", (clause,)) for clause, broken in ALL_BROKEN},
        **{(name, one): (driver_class(name), BENCHES[name], one, ()) for name in driver_names() for one in DIALECTS},
        **{(where, "plain"): (stand_in, where, "plain", ()) for where, stand_in in STAND_INS.items()},
    }
    with ThreadPoolExecutor(10) as pool:
        yield {key: pool.submit(examined, *cast(Any, run)) for key, run in runs.items()}


def on(driver: type[Instrument]) -> str:
    return next(where for interface, where in ON.items() if issubclass(driver, interface))


def test_every_registered_driver_has_a_bench() -> None:
    assert set(driver_names()) == set(BENCHES)


@pytest.mark.parametrize("profile", DIALECTS)
@pytest.mark.parametrize("name", driver_names())
def test_a_registered_driver_conforms_in_every_dialect_and_its_instrument_is_left_as_it_was(
    name: str, profile: str, reports: Reports
) -> None:
    report = reports[name, profile].result()
    assert report.conforms, str(report)
    dialect = next((word for word in CANNOT if word in profile), "")
    assert set(report.clauses("pass")) == TRIED[name] - CANNOT.get(dialect, set())


@pytest.mark.parametrize("where", STAND_INS)
def test_a_stand_in_whose_instrument_has_come_conforms(where: str, reports: Reports) -> None:
    report = reports[where, "plain"].result()
    assert report.conforms, str(report)


@pytest.mark.parametrize(("clause", "driver"), ALL_BROKEN, ids=lambda one: getattr(one, "__name__", str(one)))
def test_a_broken_driver_fails_on_its_own_clause_and_no_other(
    clause: int, driver: type[Instrument], reports: Reports
) -> None:
    report = reports[driver, "plain"].result()
    assert report.clauses("fail") == (clause,), str(report)
    assert not report.conforms


def test_every_clause_has_a_driver_that_breaks_it() -> None:
    assert {clause for clause, _ in ALL_BROKEN} == set(range(1, len(conformance.CLAUSES) + 1))


def test_a_report_of_nothing_but_skipped_clauses_is_no_conformance() -> None:
    skipped = conformance.Result(clause=1, title="", outcome="skipped")
    assert not Report(driver="", resource="", results=(skipped,)).conforms


def test_the_command_sets_nothing_without_permission_and_says_the_verdict_in_its_exit_code(
    capsys: pytest.CaptureFixture[str],
) -> None:
    for timeout_s in TIMEOUTS_S:
        with Rack(PLAIN) as rack:
            address = resource(rack, "dc")
            code = main(["scpi-dc-supply", address, "--timeout", str(timeout_s)])
            units = {unit for one in rack.received for unit in one.text.split(";") if "?" not in unit}
        assert units == {"TRAPD:NOSUCH"}  # which no instrument knows: the kit provokes an error to see it reported
        if code == 0:
            break
    printed = capsys.readouterr().out
    assert code == 0, printed
    assert "ScpiDcSupply at" in printed
    assert "17 of 25 clauses were not tried" in printed
    assert printed.count("skipped") == len(range(9, 26))
    assert main(["scpi-dc-supply", address, "--timeout", "0.2"]) == 5
    assert main(["no-such-driver", address]) == 2
    assert "no-such-driver" in capsys.readouterr().err
