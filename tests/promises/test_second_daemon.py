"""Promise 3: one writer. A second daemon on the same instruments, or on the same record, is refused and says why."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

from tests.promises.process import Serving, wait_until_empty
from trapd_simulated import Rack


def run_serve(trap_file: Path) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "trapd.cli", "serve", str(trap_file)]
    return subprocess.run(command, capture_output=True, text=True, timeout=60, check=False)


def test_a_second_daemon_on_the_same_instruments_is_refused_and_told_who_holds_them(tmp_path: Path) -> None:
    first, second = tmp_path / "one", tmp_path / "two"
    first.mkdir()
    second.mkdir()
    with Rack(seed=3) as rack:
        serving = Serving(first, rack)
        wait_until_empty(serving.start())
        assert serving.process is not None
        received = len(rack.received)
        other = Serving(second, rack)
        refused = run_serve(other.trap_file)
        assert refused.returncode == 3
        assert f"(pid {serving.process.pid})" in refused.stderr
        assert "nothing was opened" in refused.stderr
        assert "Traceback" not in refused.stderr
        assert len(rack.received) == received
        assert serving.stop() == 0
        assert not other.record.exists(), "a refused daemon leaves no record behind"


def test_a_second_daemon_on_the_same_record_is_refused(tmp_path: Path) -> None:
    with Rack(seed=3) as rack, Rack(seed=4) as elsewhere:
        serving = Serving(tmp_path, rack)
        serving.start()
        again = tmp_path / "again"
        again.mkdir()
        other = Serving(again, elsewhere, record_folder=tmp_path)
        refused = run_serve(other.trap_file)
        assert refused.returncode == 3
        assert "north-bench.sqlite" in refused.stderr
        assert serving.stop() == 0


def test_after_the_first_has_died_the_next_may_start(tmp_path: Path) -> None:
    with Rack(seed=3) as rack:
        serving = Serving(tmp_path, rack)
        serving.start()
        serving.kill()
        serving.start()
        assert serving.stop() == 0
