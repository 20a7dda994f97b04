"""What all tests share: in CI a skip that `SKIPS` does not name is a failure."""

from __future__ import annotations

import os

import pytest

SKIPS: dict[str, str] = {}
"""Node id (or its beginning) of a test that may be skipped in CI, and why."""


@pytest.hookimpl(wrapper=True)
def pytest_runtest_makereport(item: pytest.Item, call: pytest.CallInfo[None]):  # type: ignore[no-untyped-def]
    report = yield
    if report.skipped and os.environ.get("CI") and not any(item.nodeid.startswith(name) for name in SKIPS):
        report.outcome = "failed"
        report.longrepr = f"skipped in CI without being listed in tests/conftest.py: {report.longrepr}"
    return report
