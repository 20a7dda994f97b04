"""The photon counter and the gauge, by what they answer."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from tests.drivers.simulated.client import Client
from trapd_simulated import (
    Dialect,
    Fault,
    FaultKind,
    GaugeSettings,
    IonSettings,
    ManualClock,
    PhotonCounterSettings,
    Rack,
    RackSettings,
    RackUseError,
    RfSourceSettings,
)


def counting(rack: Rack, text: str) -> str:
    return rack.front_panel("counter", text) or ""


@pytest.fixture
def rack(clock: ManualClock) -> Rack:
    return Rack(clock=clock)


def test_a_count_is_finished_when_its_gate_is_over_and_stays_the_same(rack: Rack, clock: ManualClock) -> None:
    counting(rack, "TOT:GATE:TIME 0.5;:INIT")
    assert counting(rack, "STAT:OPER:COND?") == "16"
    clock.advance(0.499)
    with pytest.raises(RackUseError, match="-230"):  # SCPI-1999 21.8.11, "Data corrupt or stale" [mem]
        counting(rack, "FETC?")
    clock.advance(0.002)
    assert counting(rack, "STAT:OPER:COND?") == "0"
    first = counting(rack, "FETC?")
    clock.advance(1000.0)
    assert counting(rack, "FETC?;:FETC?") == f"{first};{first}"


@pytest.mark.parametrize("before", ["*RST", "TOT:GATE:TIME 1;:INIT;:ABOR"])
def test_without_a_finished_count_there_is_none(rack: Rack, clock: ManualClock, before: str) -> None:
    counting(rack, before)
    clock.advance(10.0)
    with pytest.raises(RackUseError, match="-230"):
        counting(rack, "FETC?")


def test_a_count_never_holds_photons_of_the_gate_it_replaced(clock: ManualClock) -> None:
    """1e6 dark counts in each long gate; the short one sees a ten thousandth of them."""
    rack = Rack(RackSettings(ion=IonSettings(dark_per_s=1e5)), clock=clock)
    for _ in range(20):
        counting(rack, "TOT:GATE:TIME 10;:INIT")
        clock.advance(9.9)
        counting(rack, "TOT:GATE:TIME 0.001;:INIT")
        clock.advance(5.0)
        assert 40 < int(counting(rack, "FETC?")) < 180  # Poisson of mean 100: six sigma and more


def test_counts_are_poisson(rack: Rack, clock: ManualClock) -> None:
    """No ion: the 200 dark counts a second alone; chi-square against scipy's distribution of the known mean."""
    counting(rack, "TOT:GATE:TIME 0.05")
    counts = []
    for _ in range(4000):
        counting(rack, "INIT")
        clock.advance(0.06)
        counts.append(int(counting(rack, "FETC?")))
    edges = np.arange(3, 19)
    observed = np.histogram(counts, bins=[-0.5, *(edges + 0.5), 1e9])[0]
    below = stats.poisson.cdf([*edges, 1e9], 10.0)
    expected = 4000 * np.diff([0.0, *below])
    assert stats.chisquare(observed, expected).pvalue > 1e-3


def test_a_seed_repeats_every_count_and_another_does_not() -> None:
    def counts(seed: int) -> list[int]:
        clock = ManualClock()
        rack = Rack(seed=seed, clock=clock)
        counting(rack, "TOT:GATE:TIME 1")
        found = []
        for _ in range(10):
            counting(rack, "INIT")
            clock.advance(1.0)
            found.append(int(counting(rack, "FETC?")))
        return found

    assert counts(3) == counts(3)
    assert counts(3) != counts(4)


def test_the_range_of_gates_can_be_asked_and_is_kept(rack: Rack) -> None:
    assert [float(one) for one in counting(rack, "TOT:GATE:TIME? MIN;TIME? MAX").split(";")] == [1e-4, 100.0]
    with pytest.raises(RackUseError, match="-222"):
        counting(rack, "SENS:TOT:GATE:TIME 101")


def test_a_power_cycle_forgets_the_count(rack: Rack, clock: ManualClock) -> None:
    counting(rack, "INIT")
    clock.advance(1.0)
    rack.power_off("counter")
    rack.power_on("counter")
    with pytest.raises(RackUseError, match="-230"):
        counting(rack, "FETC?")


def test_a_rack_that_never_has_an_ion_counts_nothing_and_says_so(clock: ManualClock) -> None:
    rack = Rack(RackSettings(ion=None), clock=clock)
    counting(rack, "TOT:GATE:TIME 10;:INIT")
    clock.advance(11.0)
    assert counting(rack, "FETC?") == "0"
    with pytest.raises(RackUseError, match="no ion"):
        rack.load_ion()


def test_faults_work_on_counter_and_gauge_too() -> None:
    with Rack() as rack, Client(rack.ports["counter"]) as counter, Client(rack.ports["vacuum"]) as gauge:
        rack.inject("counter", Fault(kind=FaultKind.IGNORE_COMMANDS, times=1))
        counter.tell("INIT")
        assert counter.ask("STAT:OPER:COND?") == "0"
        rack.inject("vacuum", Fault(kind=FaultKind.READBACK_OFFSET, value=1.0))
        assert float(gauge.ask("MEAS:PRES?")) == pytest.approx(1.0)
        rack.inject("vacuum", Fault(kind=FaultKind.WRONG_IDENTITY, times=1))
        assert gauge.ask("*IDN?").startswith("SOMEBODY ELSE")
        for name in ("counter", "vacuum"):
            with pytest.raises(RackUseError, match="no output"):
                rack.inject(name, FaultKind.TRIP)


def test_the_gauge_reads_the_pressure_it_is_given_with_its_noise(rack: Rack) -> None:
    rack.set_pressure("vacuum", 5e-9)
    readings = [float(rack.front_panel("vacuum", "MEAS:SCAL:PRES?") or 0) for _ in range(2000)]
    assert np.mean(readings) == pytest.approx(5e-9, rel=0.02 * 5 / np.sqrt(2000))
    assert np.std(readings) == pytest.approx(0.02 * 5e-9, rel=5 / np.sqrt(2 * 2000))


@pytest.mark.parametrize(("unit", "expected"), [("MBAR", 1e-6), ("PA", 1e-4), ("TORR", 7.50062e-7)])  # 1 mbar = 100 Pa
def test_the_gauge_speaks_the_unit_of_its_dialect(clock: ManualClock, unit: str, expected: float) -> None:
    gauge = GaugeSettings(pressure_mbar=1e-6, noise_relative=0.0, dialect=Dialect(pressure_unit=unit))  # type: ignore[arg-type]
    rack = Rack(RackSettings(instruments={"rf": RfSourceSettings(), "vacuum": gauge}), clock=clock)
    assert float(rack.front_panel("vacuum", "MEAS:PRES?") or 0) == pytest.approx(expected, rel=1e-5)


@pytest.mark.parametrize("pressure_mbar", [None, 2e-3])
def test_a_sensor_that_is_off_or_over_range_answers_not_a_number(rack: Rack, pressure_mbar: float | None) -> None:
    rack.set_pressure("vacuum", pressure_mbar)
    assert float(rack.front_panel("vacuum", "MEAS:PRES?") or 0) == 9.91e37  # SCPI-1999 volume 1, 7.2.1.5 [mem]


def test_a_pressure_is_a_number_above_zero_at_a_gauge(rack: Rack) -> None:
    with pytest.raises(RackUseError, match="above 0"):
        rack.set_pressure("vacuum", 0.0)
    with pytest.raises(RackUseError, match="no gauge"):
        rack.set_pressure("rf", 1e-9)


def test_headers_and_integers_follow_the_dialect(clock: ManualClock) -> None:
    counter = PhotonCounterSettings(dialect=Dialect(replies="header"))
    rack = Rack(RackSettings(instruments={"rf": RfSourceSettings(), "counter": counter}, ion=None), clock=clock)
    counting(rack, "INIT")
    clock.advance(1.0)
    assert counting(rack, "FETC?") == "FETC 0"
