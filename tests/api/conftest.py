"""One running trap for all tests that leave it as it was, and plain HTTP to it."""

from __future__ import annotations

from collections.abc import Iterator

import httpx2
import pytest

from tests.running import RunningTrap, running_trap


@pytest.fixture(scope="package")
def trap(tmp_path_factory: pytest.TempPathFactory) -> Iterator[RunningTrap]:
    """Switched on at its first point, empty."""
    with running_trap(tmp_path_factory.mktemp("trap")) as one:
        one.switch_on()
        yield one


@pytest.fixture(scope="package")
def local(trap: RunningTrap) -> Iterator[httpx2.Client]:
    """Over the Unix socket."""
    with over_socket(trap) as http:
        yield http


@pytest.fixture(scope="package")
def tcp(trap: RunningTrap) -> Iterator[httpx2.Client]:
    """Over TCP, without a token."""
    with httpx2.Client(base_url=trap.url, timeout=20) as http:
        yield http


def over_socket(trap: RunningTrap) -> httpx2.Client:
    transport = httpx2.HTTPTransport(uds=str(trap.socket_path))
    return httpx2.Client(transport=transport, base_url="http://localhost", timeout=20)


def bearer(token: str) -> dict[str, str]:
    return {"Authorization": f"Bearer {token}"}
