"""One thread for linear algebra, as in the daemon: more of them only get in each other's way at these sizes."""

from __future__ import annotations

from collections.abc import Iterator

import pytest
from threadpoolctl import threadpool_limits


@pytest.fixture(autouse=True, scope="package")
def one_thread() -> Iterator[None]:
    with threadpool_limits(limits=1, user_api="blas"):
        yield
