"""SIGKILL at random moments of a ramp: nothing was received without an earlier intent, and the next start says so.

10 kills in the suite; TRAPD_KILLS=100 for more. The kill keeps the page cache, so it proves order, not fsync: that is
`test_order_on_disk.py`.
"""

from __future__ import annotations

import random
import sqlite3
import threading
import time
from contextlib import suppress
from pathlib import Path

import pytest

from tests.controller.bench import is_query
from tests.promises.process import Serving, asked_for, wait_until_empty
from tests.promises.witness import Witness
from trapd.errors import TrapdError
from trapd.record import verify
from trapd_simulated import Rack

KILLS = asked_for("TRAPD_KILLS", 10)


@pytest.mark.long
def test_killed_at_random_moments_nothing_was_received_without_an_intent(tmp_path: Path) -> None:
    moments = random.Random(20261201)
    witness = Witness(tmp_path / "north-bench.sqlite")
    with Rack(seed=3, on_receive=witness) as rack:
        serving = Serving(tmp_path, rack)
        client = serving.start()
        wait_until_empty(client)
        client.on(why="for the kills")
        client.ions("held", ions={"40Ca+": 1}, why="for the kills")
        killed_moving = 0
        for number in range(KILLS):
            target = 600.0 if number % 2 == 0 else 120.0
            ramp = threading.Thread(target=_move, args=(serving, target))
            received = witness.commands
            ramp.start()
            while witness.commands == received:
                time.sleep(0.001)
            time.sleep(moments.uniform(0.0, 0.25))
            serving.kill()
            ramp.join()
            killed_moving += client_was_moving(serving.record)
            stood = rack.electrodes().terminals_v["dc"][1]
            before_start = len(rack.received)
            client = serving.start()
            _the_start_says_what_it_found(serving.record, stood)
            assert [one.text for one in rack.received[before_start:] if not is_query(one.text)] == []
            assert rack.electrodes().rf_outputs["rf"], "the daemon's death changes nothing"
        assert serving.stop() == 0
        assert witness.orphans == []
        assert witness.commands > 100
        assert killed_moving >= KILLS // 2, "the kills missed the ramps"
        report = verify(serving.record)
        assert report.ok, report.problems


def client_was_moving(record: Path) -> bool:
    """Whether the last request was under way: it has no result."""
    with sqlite3.connect(f"file:{record}?mode=ro", uri=True) as db:
        last = db.execute("SELECT max(seq) FROM entries WHERE kind = 'request'").fetchone()[0]
        result = db.execute("SELECT count(*) FROM entries WHERE kind = 'result' AND seq > ?", (last,)).fetchone()[0]
    return bool(result == 0)


def _the_start_says_what_it_found(record: Path, stood_v: float) -> None:
    with sqlite3.connect(f"file:{record}?mode=ro", uri=True) as db:
        start = db.execute("SELECT max(seq) FROM entries WHERE kind = 'start'").fetchone()[0]
        before = db.execute("SELECT max(seq) FROM entries WHERE kind = 'start' AND seq < ?", (start,)).fetchone()[0]
        found = db.execute(
            "SELECT json_extract(body, '$.data.values.endcaps'), json_extract(body, '$.data.open_intents') "
            "FROM entries WHERE kind = 'found' AND seq > ? AND json_extract(body, '$.data.open_intents') IS NOT NULL",
            (start,),
        ).fetchone()
        unknown = db.execute(
            "SELECT json_group_array(seq) FROM (SELECT seq FROM setpoints "
            "WHERE state = 'unknown' AND seq BETWEEN ? AND ? ORDER BY seq)",
            (before, start),
        ).fetchone()[0]
    # The readback is within the supply's accuracy of what stands there.
    assert found[0] == pytest.approx(stood_v, abs=0.3)
    assert found[1] == unknown, "every intent whose outcome nobody knows is named"


def _move(serving: Serving, target_v: float) -> None:
    from trapd.client import Client

    with suppress(TrapdError):  # the daemon is killed under it
        Client(serving.socket).set({"endcaps": target_v}, why="a long way", wait=False)
