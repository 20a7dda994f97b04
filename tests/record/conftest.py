from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.record.samples import BOOT, StandingClock
from trapd.record import Record


@pytest.fixture
def clock() -> StandingClock:
    return StandingClock()


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "trap.sqlite"


@pytest.fixture
def record(path: Path, clock: StandingClock) -> Iterator[Record]:
    record = Record.open(path, clock=clock, boot_id=BOOT)
    yield record
    assert record.close(timeout_s=10)
