from __future__ import annotations

from pathlib import Path

import pytest

from tests import traps


@pytest.fixture
def file(tmp_path: Path) -> Path:
    """The linear trap's file. With 40Ca+ q = 0.2885, a_z = 0.0062; the rest of its numbers are in test_judge.py."""
    return traps.write(tmp_path, traps.NORTH_BENCH)
