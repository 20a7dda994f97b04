"""``trapd judge`` of one state, wall time in all: a new interpreter, its imports, the file, the verdict, the answer."""

from __future__ import annotations

import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import Any, NamedTuple

from tests import traps

GOAL_S = 0.6
RUNS = 7

_STAGES = """
import sys, time
began = time.perf_counter()
import trapd.cli.program, trapd.cli.judge
from trapd.config.build import guard_of
from trapd.config.read import read
from trapd.guard.verdict import judge
imported = time.perf_counter()
config = read(sys.argv[1])
model = guard_of(config)
read_ = time.perf_counter()
from trapd.cli.offline import contents_of, state_of
verdict = judge(model, contents_of(config, None), state_of(config, model, sys.argv[2:]))
judged = time.perf_counter()
assert not verdict.accepted
print(imported - began, read_ - imported, judged - read_)
"""
_REFUSED = ("drive.amplitude=120V", "endcaps=400V")
"""Slower than an accepted state: the nearest allowed value is looked for."""


def measure() -> list[dict[str, Any]]:
    """The whole command beside an interpreter that does nothing; then where the time goes. The least of `RUNS` each: more
    is what else the machine did."""
    with tempfile.TemporaryDirectory() as folder:
        file = str(traps.write(Path(folder), traps.NORTH_BENCH))
        judge = [sys.executable, "-m", "trapd.cli", "judge", file, "--json"]
        nothing, accepted, refused = [], [], []
        for _ in range(RUNS):
            nothing.append(run([sys.executable, "-c", "pass"], 0))
            accepted.append(run(judge, 0))
            refused.append(run([*judge, *_REFUSED], 3))
        stages = [_stages_s(file) for _ in range(RUNS)]
    bare = min(nothing).wall_s
    goals = [
        _row("trapd judge, accepted, whole command", min(accepted).wall_s, bare, GOAL_S),
        _row("trapd judge, refused, whole command", min(refused).wall_s, bare, GOAL_S),
    ]
    parts = zip(("imports", "reading the file", "the verdict, refused"), zip(*stages, strict=True), strict=True)
    return goals + [_row(f"  of this: {name}", min(values), None, None) for name, values in parts]


class Cost(NamedTuple):
    """Of one process: wall time, and its own processor time, which other processes lengthen less."""

    wall_s: float
    processor_s: float


def run(command: list[str], code: int) -> Cost:
    """Raises AssertionError unless it leaves with ``code``."""
    before, began = resource.getrusage(resource.RUSAGE_CHILDREN), time.perf_counter()
    ran = subprocess.run(command, capture_output=True, check=False)
    wall_s, after = time.perf_counter() - began, resource.getrusage(resource.RUSAGE_CHILDREN)
    assert ran.returncode == code, ran.stderr.decode()
    return Cost(wall_s, after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime)


def _stages_s(file: str) -> list[float]:
    command = [sys.executable, "-c", _STAGES, file, *_REFUSED]
    return [float(word) for word in subprocess.run(command, capture_output=True, check=True).stdout.split()]


def _row(name: str, value_s: float, peer_s: float | None, goal_s: float | None) -> dict[str, Any]:
    return {
        "name": name,
        "value": value_s,
        "unit": "s",
        "peer": peer_s,
        "ratio": None if peer_s is None else value_s / peer_s,
        "goal": "none" if goal_s is None else f"under {goal_s:g} s",
        "met": None if goal_s is None else value_s < goal_s,
    }
