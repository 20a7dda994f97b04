from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.schedule.stage import Stage, stage


@pytest.fixture
def bench(tmp_path: Path) -> Iterator[Stage]:
    with stage(tmp_path) as one:
        yield one
