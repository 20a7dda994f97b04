"""How long `off` takes until every instrument that answers has confirmed: in a ramp, with one hung, with a dead disk."""

from __future__ import annotations

import statistics
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

from tests.controller.bench import Bench, bench
from tests.controller.test_faults import SLOW, kill_disk, moving
from trapd_simulated import Fault, FaultKind

TIMES = 5
WITHIN_S = {"in a ramp": 0.25, "with RF hung": 0.5, "with the supply hung": 0.25, "with a dead disk": 0.25}


def measure() -> list[dict[str, Any]]:
    before: dict[str, tuple[Callable[[Bench], object], str | None]] = {
        "in a ramp": (_in_a_ramp, None),
        "with RF hung": (lambda made: made.rack.inject("rf", Fault(kind=FaultKind.HANG)), "rf"),
        "with the supply hung": (lambda made: made.rack.inject("dc", Fault(kind=FaultKind.HANG)), "dc"),
        "with a dead disk": (kill_disk, None),
    }
    return [_row(name, prepare, hung) for name, (prepare, hung) in before.items()]


def _in_a_ramp(made: Bench) -> None:
    made.submit("set", **SLOW)
    made.wait(lambda: moving(made))


def _row(name: str, prepare: Callable[[Bench], object], hung: str | None) -> dict[str, Any]:
    worst = []
    for _ in range(TIMES):
        with tempfile.TemporaryDirectory() as folder, bench(Path(folder)) as made:
            made.switch_on()
            prepare(made)
            report = made.ask("off")["instruments"]
            assert all(one["off"] for instrument, one in report.items() if instrument != hung)
            made.controller._desk.record = made.record  # the disk comes back, or its loss is logged
            worst.append(max(one["after_s"] for instrument, one in report.items() if instrument != hung))
    return {
        "name": f"off {name}, median of {TIMES} (worst {max(worst):.3f} s)",
        "value": statistics.median(worst),
        "unit": "s",
        "peer": None,
        "ratio": None,
        "goal": f"worst under {WITHIN_S[name]} s",
        "met": max(worst) < WITHIN_S[name],
    }
