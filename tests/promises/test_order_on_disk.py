"""A system-call trace: between two commands to an instrument there is always an fdatasync that ended before the second."""

from __future__ import annotations

import re
import shutil
from pathlib import Path

import pytest

from tests.promises.process import Serving, wait_until_empty
from trapd_simulated import Rack


@pytest.mark.long
@pytest.mark.skipif(shutil.which("strace") is None, reason="strace is not installed")
def test_every_command_comes_after_an_fdatasync_of_its_own(tmp_path: Path) -> None:
    trace = tmp_path / "trace"
    wrapper = ["strace", "-f", "-qq", "-s", "200", "-e", "trace=fdatasync,sendto,kill,exit_group", "-o", str(trace)]
    with Rack(seed=3) as rack:
        serving = Serving(tmp_path, rack, wrapper=wrapper)
        client = serving.start()
        wait_until_empty(client)
        client.on(why="for the trace")
        client.set({"endcaps": 180.0, "rods": 2.0}, why="for the trace")
        client.close()
        assert serving.process is not None
        _terminate_child(serving.process.pid)
        serving.process.wait(30)
    synced, commands, bare = False, 0, []
    for line in trace.read_text(errors="replace").splitlines():
        # An fdatasync that blocks is two lines; only its return counts.
        if re.search(r"fdatasync(\(\d+\)| resumed>\)).*= 0", line):
            synced = True
        elif "sendto(" in line and re.search(r'"[^"]*(VOLT|FREQ|OUTP)[^"?;]* [^"?;]+[;\\]', line):
            commands += 1
            if not synced:
                bare.append(line)
            synced = False
    assert commands > 150, "the trace must show the ramp's commands"
    assert bare == []


def _terminate_child(strace_pid: int) -> None:
    """SIGTERM to the traced daemon: strace itself would only detach."""
    import os
    import signal

    children = Path(f"/proc/{strace_pid}/task/{strace_pid}/children").read_text().split()
    os.kill(int(children[0]), signal.SIGTERM)
