"""SIGKILL at random moments of a scan: the tickle ends within its burst, points and intents agree, the next start says so.

10 kills in the suite; TRAPD_KILLS=100 for more.
"""

from __future__ import annotations

import random
import sqlite3
import time
from contextlib import closing
from pathlib import Path
from typing import Any

import pytest

from tests.controller.bench import SCANNED, is_query
from tests.promises.process import Serving, asked_for, wait_until_empty
from tests.promises.witness import Witness
from trapd.client import Client
from trapd.record import verify
from trapd_simulated import Rack

KILLS = asked_for("TRAPD_KILLS", 10)
LONG = SCANNED.replace('target = "50 Hz"', 'target = "1 Hz"\npasses = 300')
BURST_S = 0.52


@pytest.mark.long
def test_killed_at_random_moments_of_a_scan_the_tickle_ends_by_itself(tmp_path: Path) -> None:
    moments = random.Random(20261202)
    witness = Witness(tmp_path / "north-bench.sqlite")
    with Rack(seed=3, on_receive=witness) as rack:
        serving = Serving(tmp_path, rack, toml=LONG)
        client = serving.start()
        wait_until_empty(client)
        client.on(why="for the kills")
        rack.load_ion()
        hold(client)
        killed_tickling = 0
        for _ in range(KILLS):
            bursts = witness.bursts
            scan = client.scan("x", why="for the kills", wait=False)["entry"]
            while witness.bursts == bursts:
                time.sleep(0.001)
            time.sleep(moments.uniform(0.0, 0.3))
            serving.kill()
            killed_tickling += rack.electrodes().rf_outputs["tickle"]
            time.sleep(BURST_S + 0.05)
            assert rack.electrodes().levels_v["tickle"] == 0.0, "nobody told it, and it is silent"
            points_and_intents_agree(serving.record, scan, witness.bursts - bursts)
            before_start = len(rack.received)
            client = serving.start()
            the_start_names_the_scan(serving.record, scan)
            told = [one for one in rack.received[before_start:] if not is_query(one.text)]
            assert [(one.instrument, one.text) for one in told] == [("tickle", "OUTP OFF;:SYST:ERR?")]
            assert rack.electrodes().rf_outputs == {"rf": True, "tickle": False}
            hold(client)
        assert serving.stop() == 0
        assert witness.orphans == []
        assert killed_tickling >= KILLS // 4, "the kills missed the bursts"
        report = verify(serving.record)
        assert report.ok, report.problems


def hold(client: Client) -> None:
    client.ions("held", ions={"40Ca+": 1}, why="for the kills")


def points_and_intents_agree(record: Path, scan: int, bursts: int) -> None:
    """Each point has its confirmed burst; at most the last burst has no outcome, and at most the last two no point."""
    with closing(sqlite3.connect(f"file:{record}?mode=ro", uri=True)) as db:
        sent: list[Any] = db.execute(
            "SELECT i.seq, o.state FROM intents i LEFT JOIN outcomes o ON o.intent = i.seq "
            "WHERE i.request = ? AND i.quantity = 'burst' ORDER BY i.seq",
            (scan,),
        ).fetchall()
        points = [
            row[0]
            for row in db.execute(
                "SELECT intent FROM scan_points WHERE request = ? AND intent IS NOT NULL ORDER BY seq", (scan,)
            )
        ]
    assert bursts <= len(sent) <= bursts + 1
    assert [state for _, state in sent[:-1]] == ["confirmed"] * (len(sent) - 1)
    assert points == [seq for seq, _ in sent[: len(points)]]
    assert len(sent) - 1 <= len(points) <= len(sent)


def the_start_names_the_scan(record: Path, scan: int) -> None:
    with closing(sqlite3.connect(f"file:{record}?mode=ro", uri=True)) as db:
        found = db.execute(
            "SELECT json_extract(body, '$.data.open_scan') FROM entries WHERE kind = 'found' "
            "AND json_extract(body, '$.data.open_intents') IS NOT NULL ORDER BY seq DESC LIMIT 1"
        ).fetchone()
    assert found == (scan,)
