"""Hypothesis in a time box: for one seed the same examples in the same order, as many as fit."""

from __future__ import annotations

import os
import time
from collections.abc import Callable
from contextlib import suppress
from typing import Any

from hypothesis import HealthCheck, Phase, given, seed, settings
from hypothesis.errors import UnsatisfiedAssumption
from hypothesis.strategies import SearchStrategy, tuples

TOTAL_S = float(os.environ.get("TRAPD_FUZZ_S", "25"))
"""For all of tests/fuzz; each test has a share of it."""

SEED = int(os.environ.get("TRAPD_FUZZ_SEED", "0"))


class TimeIsUp(BaseException):
    """Not an `Exception`, so that Hypothesis takes it for no failure and lets it out."""


def fuzz(share: float, body: Callable[..., None], *strategies: SearchStrategy[Any], least: int) -> int:
    """Run ``body`` on examples for ``share`` of the time, and return on how many.

    A failure is raised as Hypothesis found it, unshrunk: what is fuzzed here has a memory, so smaller examples fail
    for other reasons. Fewer than ``least`` examples are a failure too, or a slow machine would pass untested.
    """
    seen, failed, ends_s = 0, False, time.monotonic() + share * TOTAL_S

    @seed(SEED)
    @settings(
        max_examples=10**7,
        database=None,
        deadline=None,
        phases=[Phase.generate],
        suppress_health_check=list(HealthCheck),
    )
    @given(tuples(*strategies))
    def run(drawn: tuple[Any, ...]) -> None:
        nonlocal seen, failed
        if not failed and seen >= least and time.monotonic() > ends_s:
            raise TimeIsUp
        seen += 1
        try:
            body(*drawn)
        except UnsatisfiedAssumption:
            seen -= 1
            raise
        except Exception:
            failed = True
            raise

    with suppress(TimeIsUp):
        run()
    assert seen >= least, f"only {seen} different examples, expected {least}"
    return seen
