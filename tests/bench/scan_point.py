"""What one point of a scan costs beyond its dwell: in a running controller, and with the drivers alone.

The rack is in this process and shares the interpreter with both: the difference is what the figures are for.
"""

from __future__ import annotations

import statistics
import tempfile
import time
from collections.abc import Sequence
from itertools import pairwise
from pathlib import Path
from typing import Any

from tests.controller.bench import SCANNED, Bench, bench
from trapd.controller.counting import POLL_S
from trapd.record import Entry
from trapd.setpoint import Contents
from trapd_drivers.scpi.photon_counter import ScpiPhotonCounter
from trapd_drivers.scpi.rf_source import ScpiRfSource
from trapd_simulated import Rack

ONE = Contents(presence="held", ions={"40Ca+": 1})


def measure() -> list[dict[str, Any]]:
    """Seconds for each point beyond its dwell: of the whole scan (its judgement, estimates and commits with it), and from
    point to point. The peer sends the same frequencies through the same drivers, writes nothing down and asks nobody."""
    with tempfile.TemporaryDirectory() as folder, bench(Path(folder), SCANNED) as made:
        made.switch_on(held=False)
        made.rack.load_ion()
        made.ask("ions", contents=ONE)
        began_s = time.perf_counter()
        made.ask("scan", scan="x")
        whole_s = time.perf_counter() - began_s
        points = made.entries("scan_point")
        peer_s = _peer(made.rack, points, _burst_s(made))
    dwell_s, count = points[0].data["dwell_s"], len(points)
    within = [(b.data["at_us"] - a.data["at_us"]) / 1e6 for a, b in pairwise(points) if _are_neighbours(a, b)]
    peer_each_s = sum(peer_s) / count - dwell_s
    return [
        _row(
            f"scan: a point beyond its dwell, the whole scan over its {count} points",
            whole_s / count - dwell_s,
            peer_each_s,
        ),
        _row(
            "scan: a point beyond its dwell, from point to point, median",
            statistics.median(within) - dwell_s,
            statistics.median(peer_s) - dwell_s,
        ),
    ]


def _burst_s(made: Bench) -> float:
    return next(float(one.data["burst_s"]) for one in made.entries("intent") if one.data["quantity"] == "burst")


def _are_neighbours(one: Entry, other: Entry) -> bool:
    """In one pass; between passes there is an estimate and a look at the instruments."""
    return one.data["pass_number"] == other.data["pass_number"]


def _peer(rack: Rack, points: Sequence[Entry], burst_s: float) -> list[float]:
    """Seconds of each of the same points, dwell and all."""
    tickle = ScpiRfSource.open(f"TCPIP::127.0.0.1::{rack.ports['tickle']}::SOCKET")
    counter = ScpiPhotonCounter.open(f"TCPIP::127.0.0.1::{rack.ports['counter']}::SOCKET")
    times_s = [time.perf_counter()]
    for point in points:
        if point.data["frequency_hz"] is None:
            _count(counter, point.data["dwell_s"])
        else:
            _tickle(tickle, point.data["frequency_hz"], point.data["level_v"], burst_s)
            _count(counter, point.data["dwell_s"])
            _silence(tickle)
        times_s.append(time.perf_counter())
    tickle.close()
    counter.close()
    return [b - a for a, b in pairwise(times_s)]


def _tickle(tickle: ScpiRfSource, frequency_hz: float, level_v: float, burst_s: float) -> None:
    assert not tickle.read_output()
    tickle.set_frequency_hz(frequency_hz)
    if abs(tickle.read_level_v() - level_v) > tickle.level.resolution / 2:
        tickle.set_level_v(level_v)
    tickle.read_frequency_hz()
    tickle.read_level_v()
    tickle.start_burst(burst_s)


def _silence(tickle: ScpiRfSource) -> None:
    assert tickle.read_burst()
    assert tickle.read_output()
    tickle.set_output(False)


def _count(counter: ScpiPhotonCounter, dwell_s: float) -> int:
    counter.start_count(dwell_s)
    time.sleep(dwell_s)
    while (counts := counter.read_count()) is None:
        time.sleep(POLL_S)
    return counts


def _row(name: str, value_s: float, peer_s: float) -> dict[str, Any]:
    return {
        "name": name,
        "value": value_s,
        "unit": "s",
        "peer": peer_s,
        "ratio": value_s / peer_s,
        "goal": "none",
        "met": None,
    }
