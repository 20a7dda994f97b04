"""The kit on every registered driver in every dialect, and the kit on drivers that break one clause each."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from typing import cast

import pytest

from tests.drivers.broken import BROKEN
from tests.drivers.rack import DIALECTS, PLAIN, resource
from trapd_drivers import conformance
from trapd_drivers.conformance import Bench, Report, assert_conforms
from trapd_drivers.conformance.__main__ import main
from trapd_drivers.interfaces import Instrument, RfSource
from trapd_drivers.registry import DriverClass, driver_class, driver_names
from trapd_drivers.scpi.dc_supply import ScpiDcSupply
from trapd_drivers.scpi.rf_source import ScpiRfSource
from trapd_simulated import Rack

BENCHES = {"scpi-rf-source": "rf", "scpi-dc-supply": "dc"}
"""The rack's instrument for each registered driver. One that is missing here fails below: silence is no conformance."""

CANNOT_TELL = {"other": {14}}  # this dialect has no measurement
NO_CHANNELS = {"scpi-rf-source": {15, 16}}


def test_every_registered_driver_has_a_bench() -> None:
    assert set(driver_names()) == set(BENCHES)


@pytest.mark.parametrize("profile", DIALECTS)
@pytest.mark.parametrize("name", driver_names())
def test_a_registered_driver_conforms_in_every_dialect(name: str, profile: str) -> None:
    with Rack(DIALECTS[profile]) as rack:
        report = assert_conforms(
            driver_class(name), resource(rack, BENCHES[name]), profile=profile, timeout_s=0.4, allow_output=True
        )
    dialect = next((word for word in CANNOT_TELL if word in profile), "")
    assert set(report.clauses("skipped")) == NO_CHANNELS.get(name, set()) | CANNOT_TELL.get(dialect, set())


@pytest.fixture(scope="module")
def reports() -> dict[type[Instrument], Report]:
    """All broken drivers, each with a rack of its own; they mostly wait, so they wait together."""

    def examine(driver: type[Instrument]) -> Report:
        with Rack(PLAIN) as rack:
            where = resource(rack, "rf" if issubclass(driver, RfSource) else "dc")
            return conformance.run(
                Bench(driver=cast(DriverClass, driver), resource=where, timeout_s=0.4, allow_output=True)
            )

    with ThreadPoolExecutor(8) as pool:
        drivers = [driver for _, driver in BROKEN]
        return dict(zip(drivers, pool.map(examine, drivers), strict=True))


@pytest.mark.parametrize(("clause", "driver"), BROKEN, ids=lambda one: getattr(one, "__name__", str(one)))
def test_a_broken_driver_fails_on_its_own_clause_and_no_other(
    clause: int, driver: type[Instrument], reports: dict[type[Instrument], Report]
) -> None:
    assert reports[driver].clauses("fail") == (clause,), str(reports[driver])
    assert not reports[driver].conforms


def test_every_clause_has_a_driver_that_breaks_it() -> None:
    assert {clause for clause, _ in BROKEN} == set(range(1, len(conformance.CLAUSES) + 1))


def test_without_permission_nothing_is_set() -> None:
    with Rack(PLAIN) as rack:
        report = assert_conforms(ScpiDcSupply, resource(rack, "dc"), timeout_s=0.4)
        queries = [one.text for one in rack.received if "?" in one.text or one.text == "TRAPD:NOSUCH"]
        assert [one.text for one in rack.received] == queries
    assert set(report.clauses("skipped")) == set(range(9, 17))
    assert "8 of 16 clauses were not tried" in str(report)


def test_the_state_is_left_as_it_was_found() -> None:
    with Rack(PLAIN) as rack:
        source = ScpiRfSource.open(resource(rack, "rf"))
        source.set_frequency_hz(21e6)
        source.set_level_v(0.5)
        source.set_output(True)
        assert_conforms(ScpiRfSource, resource(rack, "rf"), timeout_s=0.4, allow_output=True)
        assert (source.read_frequency_hz(), source.read_level_v(), source.read_output()) == (21e6, 0.5, True)
        source.close()


def test_a_report_of_nothing_but_skipped_clauses_is_no_conformance() -> None:
    skipped = conformance.Result(clause=1, title="", outcome="skipped")
    assert not Report(driver="", resource="", results=(skipped,)).conforms


def test_the_command_prints_the_report_and_says_the_verdict_in_its_exit_code(
    capsys: pytest.CaptureFixture[str],
) -> None:
    with Rack(PLAIN) as rack:
        assert main(["scpi-rf-source", resource(rack, "rf"), "--timeout", "0.4"]) == 0
        address = resource(rack, "rf")
    assert "ScpiRfSource at" in capsys.readouterr().out
    assert main(["scpi-rf-source", address, "--timeout", "0.4"]) == 5
    assert main(["no-such-driver", address]) == 2
    assert "no-such-driver" in capsys.readouterr().err
