"""Whatever an instrument answers, every method of its driver returns what it should or raises a `DriverError`, in time."""

from __future__ import annotations

import math
import re
import threading
import time
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import partial
from pathlib import Path
from random import Random
from typing import Any

import pytest
from hypothesis import strategies as st

import trapd_drivers
from tests.drivers.peer import Peer
from tests.fuzz.box import fuzz
from tests.fuzz.strange_peer import StrangePeer
from trapd_drivers.errors import DriverError
from trapd_drivers.scpi.dc_supply import ScpiDcSupply
from trapd_drivers.scpi.gauge import ScpiGauge
from trapd_drivers.scpi.photon_counter import ScpiPhotonCounter
from trapd_drivers.scpi.rf_source import ScpiRfSource

TIMEOUT_S = 0.1
BOUND_S = 2 * TIMEOUT_S + 0.6  # twice the timeout, and a loaded machine
PLAIN = Path(trapd_drivers.__file__).parent / "profiles" / "plain.toml"
HERE = Path(__file__).parent.parent / "drivers"

RAISED = object()
Call = tuple[str, Callable[[Any, float], Any], Callable[[Any], bool]]


def _finite(found: Any) -> bool:
    return type(found) is float and math.isfinite(found)


def _nothing(found: Any) -> bool:
    return found is None


def _yes_or_no(found: Any) -> bool:
    return type(found) is bool


COMMON: list[Call] = [
    ("read_identity", lambda one, value: one.read_identity(), lambda found: bool(found.manufacturer)),
    ("read_status", lambda one, value: one.read_status(), lambda found: type(found.power_on) is bool),
]
CALLS: dict[Any, list[Call]] = {
    ScpiRfSource: [
        ("set_frequency_hz", lambda one, value: one.set_frequency_hz(value * 1e6), _nothing),
        ("read_frequency_hz", lambda one, value: one.read_frequency_hz(), _finite),
        ("set_level_v", lambda one, value: one.set_level_v(value), _nothing),
        ("read_level_v", lambda one, value: one.read_level_v(), _finite),
        ("measure_level_v", lambda one, value: one.measure_level_v(), lambda found: found is None or _finite(found)),
        ("set_output", lambda one, value: one.set_output(value > 20), _nothing),
        ("read_output", lambda one, value: one.read_output(), _yes_or_no),
        ("start_burst", lambda one, value: one.start_burst(value / 1e3), _nothing),
        ("read_burst", lambda one, value: one.read_burst(), _yes_or_no),
    ],
    ScpiDcSupply: [
        ("set_voltage_v", lambda one, value: one.set_voltage_v(1, value), _nothing),
        ("read_voltage_v", lambda one, value: one.read_voltage_v(1), _finite),
        (
            "measure_voltage_v",
            lambda one, value: one.measure_voltage_v(1),
            lambda found: found is None or _finite(found),
        ),
        ("set_output", lambda one, value: one.set_output(1, value > 20), _nothing),
        ("read_output", lambda one, value: one.read_output(1), _yes_or_no),
    ],
    ScpiPhotonCounter: [
        ("start_count", lambda one, value: one.start_count(value / 1e3), _nothing),
        (
            "read_count",
            lambda one, value: one.read_count(),
            lambda found: found is None or (type(found) is int and found >= 0),
        ),
    ],
    ScpiGauge: [("read_value", lambda one, value: one.read_value(), _finite)],
}
"""Each method with a number that it may need, and whether what it returned is what its contract says."""


@pytest.fixture(scope="module")
def profiles(tmp_path_factory: pytest.TempPathFactory) -> list[Path]:
    """Plain, those of the driver tests (without their pauses), and one in dBm that asks for limits and takes long lines."""
    folder = tmp_path_factory.mktemp("profiles")
    other = re.sub("(timeout_s|spacing_s) = .*", r"\1 = 0.0", (HERE / "other.toml").read_text(encoding="utf-8"))
    (folder / "other.toml").write_text(other, encoding="utf-8")
    asking = other.replace("low = -50.0\nhigh = 25.0", 'low = "POW:AMPL? MIN"\nhigh = "POW:AMPL? MAX"')
    asking = asking.replace("longest_reply_bytes = 512", "longest_reply_bytes = 20000")
    (folder / "asking.toml").write_text(asking, encoding="utf-8")
    return [PLAIN, HERE / "third.toml", folder / "other.toml", folder / "asking.toml"]


@pytest.mark.long
def test_every_call_returns_what_it_should_or_raises_a_driver_error_in_time(profiles: list[Path]) -> None:
    ended: Counter[str] = Counter()

    def one(kind: Any, profile: int, seed: int, every: int) -> None:
        random = Random(seed)
        strange = StrangePeer(profiles[profile], random, every)
        try:
            with Peer(strange.behave) as peer, ending(peer):
                talk(kind, peer.resource, str(profiles[profile]).replace(str(PLAIN), "plain"), random, ended)
        except Exception as error:
            error.add_note(
                f"{kind.__name__}, {profiles[profile].name}; the last replies were {strange.last[-4:]!r:.2000}"
            )
            raise

    drawn = (st.sampled_from(list(CALLS)), st.integers(0, 3), st.integers(0, 2**32), st.sampled_from([2, 8, 20]))
    count = fuzz(0.2, one, *drawn, least=30)
    print(f"{count} instruments, {ended.total()} calls: {dict(ended)}")
    assert {"returned", "Malformed", "Unreachable", "InstrumentRefused", "WrongIdentity", "OutOfRange"} <= ended.keys()


@contextmanager
def ending(peer: Peer) -> Iterator[None]:
    """A call that would never end ends when its peer hangs up, much too late."""
    timer = threading.Timer(20 * BOUND_S, peer.hang_up)
    timer.daemon = True
    timer.start()
    yield
    timer.cancel()


def talk(kind: Any, resource: str, profile: str, random: Random, ended: Counter[str]) -> None:
    """Open, and as many calls as opening left sense in."""
    instrument = bounded("open", partial(kind.open, resource, profile=profile, timeout_s=TIMEOUT_S), ended)
    if instrument is RAISED:
        return
    try:
        for _ in range(random.randint(3, 12)):
            name, call, is_right = random.choice(COMMON + CALLS[kind] * 2)
            value = random.choice([1.0, 2.0, 20.0, 30.0, 0.0, -1.0, 1e300, math.nan, math.inf, random.uniform(0, 50)])
            found = bounded(name, partial(call, instrument, value), ended)
            assert found is RAISED or is_right(found), f"{name} returned {found!r}"
    finally:
        instrument.close()


def bounded(name: str, call: Callable[[], Any], ended: Counter[str]) -> Any:
    """What the call returns, `RAISED` when it raised a `DriverError`."""
    began_s = time.monotonic()
    try:
        found = call()
        ended["returned"] += 1
    except DriverError as error:
        ended[type(error).__name__] += 1
        found = RAISED
    took_s = time.monotonic() - began_s
    assert took_s < BOUND_S, f"{name} took {took_s:.2f} s"
    return found
