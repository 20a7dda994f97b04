from __future__ import annotations

from collections.abc import Iterator

import pytest

from trapd_simulated import ManualClock, Rack, RfSourceSettings
from trapd_simulated.dc_supply import DcSupply
from trapd_simulated.rf_source import RfSource
from trapd_simulated.settings import DcSupplySettings


@pytest.fixture
def clock() -> ManualClock:
    return ManualClock()


@pytest.fixture
def rf(clock: ManualClock) -> RfSource:
    return RfSource("rf", RfSourceSettings(), clock, seed=0)


@pytest.fixture
def dc(clock: ManualClock) -> DcSupply:
    return DcSupply("dc", DcSupplySettings(), clock, seed=0)


@pytest.fixture
def rack() -> Iterator[Rack]:
    with Rack() as one:
        yield one
