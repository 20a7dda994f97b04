"""Promises 2 and 8 on a disk that is full: nothing moves, off works, and what was acknowledged is still there."""

from __future__ import annotations

import os
import subprocess
import time
from collections.abc import Iterator
from contextlib import suppress
from pathlib import Path

import pytest

from tests.controller.bench import is_query
from tests.promises.process import Serving, wait_until_empty
from trapd.errors import RecordUnwritable
from trapd.record import Reader, verify
from trapd_simulated import Rack

OFF_WITHIN_S = 1.0


@pytest.fixture
def small_disk(tmp_path: Path) -> Iterator[Path]:
    """A file system of 12 MB."""
    folder = tmp_path / "small"
    folder.mkdir()
    made = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "size=12m", "tmpfs", str(folder)], capture_output=True, check=False
    )
    if os.geteuid() != 0 or made.returncode != 0:
        pytest.skip("mounting a small file system takes root")
    yield folder
    subprocess.run(["umount", "-l", str(folder)], check=True)


def test_with_a_full_disk_nothing_moves_and_off_is_off(tmp_path: Path, small_disk: Path) -> None:
    with Rack(seed=3) as rack:
        serving = Serving(tmp_path, rack, record_folder=small_disk)
        client = serving.start()
        wait_until_empty(client)
        client.on(why="before the disk fills")
        acknowledged = client.status()["record"]["last_seq"]
        ballast = small_disk / "ballast"
        with ballast.open("wb", buffering=0) as file, suppress(OSError):
            while True:
                file.write(b"x" * 4096)
        with suppress(RecordUnwritable):  # what the log file has room for already may still be written
            for number in range(100):
                client.set({"endcaps": 400.0 + number % 2}, why="no room to say so")
        stands, received = rack.electrodes().terminals_v["dc"][1], len(rack.received)
        with pytest.raises(RecordUnwritable):
            client.set({"endcaps": 100.0}, why="no room to say so")
        assert [one.text for one in rack.received[received:] if not is_query(one.text)] == []
        assert rack.electrodes().terminals_v["dc"][1] == stands

        began = time.monotonic()
        answer = client.off(why="the disk is full")
        assert answer["off"] is True
        assert answer["recorded"] is False
        assert time.monotonic() - began < OFF_WITHIN_S + 0.5  # half a second waits for the record
        assert max(one["after_s"] for one in answer["instruments"].values()) < OFF_WITHIN_S
        assert not rack.electrodes().rf_outputs["rf"]
        assert client.status()["situation"]["unwritten"] > 0

        ballast.unlink()
        until = time.monotonic() + 30
        while client.status()["situation"]["unwritten"]:
            assert time.monotonic() < until
            time.sleep(0.05)
        assert serving.stop() == 0
        with Reader.open(serving.record) as reader:
            assert reader.head().seq > acknowledged
            assert reader.entries(kind="off", newest=True)[-1].data["written_late"] is True
        assert verify(serving.record).ok
