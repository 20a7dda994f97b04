"""The SCPI gauge on the simulated one, and on a peer that reads something else than a pressure."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.drivers.peer import Peer, answering
from tests.drivers.rack import resource
from trapd_drivers.errors import DriverError, InstrumentRefused, Malformed, Unreachable
from trapd_drivers.scpi.gauge import ScpiGauge
from trapd_simulated import Fault, FaultKind, Rack


@pytest.fixture
def rack() -> Iterator[Rack]:
    with Rack() as rack:
        yield rack


@pytest.fixture
def gauge(rack: Rack) -> Iterator[ScpiGauge]:
    found = ScpiGauge.open(resource(rack, "vacuum"), timeout_s=0.3)
    yield found
    found.close()


def test_a_pressure_in_mbar_is_read_in_pascal(rack: Rack, gauge: ScpiGauge) -> None:
    assert gauge.unit == "Pa"
    for pressure_mbar in (2e-10, 5e-9, 1e-4):
        rack.set_pressure("vacuum", pressure_mbar)
        assert gauge.read_value() == pytest.approx(100.0 * pressure_mbar, rel=0.15)  # 1 mbar is 100 Pa; noise of 2 %


@pytest.mark.parametrize("pressure_mbar", [None, 1.0], ids=["sensor off", "over range"])
def test_an_instrument_that_cannot_tell_is_refused_each_time_and_stays_connected(
    rack: Rack, gauge: ScpiGauge, pressure_mbar: float | None
) -> None:
    gauge.read_value()
    rack.set_pressure("vacuum", pressure_mbar)
    count = len(rack.received)
    for _ in range(3):
        with pytest.raises(InstrumentRefused, match=r"MEAS:PRES\?.* was answered '9.91.*it cannot tell"):
            gauge.read_value()
    rack.set_pressure("vacuum", 1e-9)
    assert gauge.read_value() == pytest.approx(1e-7, rel=0.15)
    assert [one.text for one in rack.received[count:]] == ["MEAS:PRES?"] * 4


@pytest.mark.parametrize(
    ("fault", "error"),
    [
        (Fault(kind=FaultKind.LATE_REPLY, delay_s=0.5, times=1), Unreachable),
        (Fault(kind=FaultKind.LOST_CONNECTION, times=1), Unreachable),
        (Fault(kind=FaultKind.PARTIAL_LINE, times=1), Unreachable),
        (Fault(kind=FaultKind.GARBAGE, times=1), Malformed),
    ],
    ids=lambda one: getattr(one, "kind", ""),
)
def test_no_fault_makes_an_old_number_a_new_one(
    rack: Rack, gauge: ScpiGauge, fault: Fault, error: type[DriverError]
) -> None:
    gauge.read_value()
    rack.inject("vacuum", fault)
    with pytest.raises(error):
        gauge.read_value()
    rack.clear("vacuum")
    rack.set_pressure("vacuum", 1e-5)
    assert gauge.read_value() == pytest.approx(1e-3, rel=0.15)


def test_a_profile_says_what_else_it_reads(tmp_path: Path) -> None:
    profile = tmp_path / "thermometer.toml"
    text = '[status]\n[gauge]\nunit = "degC"\nquery = "MEAS:TEMP?"\nreply = "TEMP {value} C"\n'
    profile.write_text(text, encoding="utf-8")
    with Peer(answering({"MEAS:TEMP?": "TEMP -38.83440 C", "SYST:ERR?": '0,"No error"'})) as peer:
        thermometer = ScpiGauge.open(peer.resource, profile=str(profile))
        assert thermometer.unit == "K"
        assert thermometer.read_value() == pytest.approx(234.3156)  # the triple point of mercury, ITS-90
        thermometer.close()
