"""The registry: one class for each name, and one clear error for everything else."""

from __future__ import annotations

from collections.abc import Callable
from importlib.metadata import EntryPoint, EntryPoints

import pytest

from trapd_drivers import registry
from trapd_drivers.errors import ProfileError
from trapd_drivers.scpi.dc_supply import ScpiDcSupply
from trapd_drivers.scpi.gauge import ScpiGauge
from trapd_drivers.scpi.photon_counter import ScpiPhotonCounter
from trapd_drivers.scpi.rf_source import ScpiRfSource

RF = "trapd_drivers.scpi.rf_source:ScpiRfSource"
DC = "trapd_drivers.scpi.dc_supply:ScpiDcSupply"


@pytest.fixture
def register(monkeypatch: pytest.MonkeyPatch) -> Callable[..., None]:
    """Pretend that these (name, value) pairs are what is installed."""

    def register(*pairs: tuple[str, str]) -> None:
        found = EntryPoints(EntryPoint(name, value, registry.GROUP) for name, value in pairs)
        monkeypatch.setattr(registry, "entry_points", lambda group: found.select(group=group))

    return register


def test_the_shipped_drivers_are_registered() -> None:
    shipped: dict[str, object] = {
        "scpi-rf-source": ScpiRfSource,
        "scpi-dc-supply": ScpiDcSupply,
        "scpi-photon-counter": ScpiPhotonCounter,
        "scpi-gauge": ScpiGauge,
    }
    assert {name: registry.driver_class(name) for name in shipped} == shipped


def test_an_unknown_name_lists_what_there_is(register: Callable[..., None]) -> None:
    register(("ours", RF), ("theirs", DC))
    with pytest.raises(ProfileError, match="'scpi-rf': unknown; registered are ours, theirs; nothing was opened"):
        registry.driver_class("scpi-rf")


def test_one_name_for_two_classes_is_an_error_and_for_one_class_twice_is_not(register: Callable[..., None]) -> None:
    register(("ours", RF), ("ours", DC))
    with pytest.raises(ProfileError, match="registered more than once"):
        registry.driver_names()
    register(("ours", RF), ("ours", RF))
    assert registry.driver_names() == ("ours",)


@pytest.mark.parametrize("value", ["no.such.module:Driver", "math:nothing", "math:pi", "builtins:dict"])
def test_an_entry_that_is_no_instrument_class_says_so(register: Callable[..., None], value: str) -> None:
    register(("ours", value))
    with pytest.raises(ProfileError, match=r"'ours'.*nothing was opened"):
        registry.driver_class("ours")


def test_scales_come_by_name_without_an_instrument() -> None:
    assert set(registry.scales_of("scpi-rf-source")) == {("frequency", 0), ("level", 0), ("burst", 0)}
    assert set(registry.scales_of("scpi-dc-supply", "plain")) == {("voltage", channel) for channel in (1, 2, 3, 4)}
    assert set(registry.scales_of("scpi-photon-counter")) == {("gate", 0)}
    assert registry.scales_of("scpi-gauge") == {}
