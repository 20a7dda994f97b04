"""``trapd demo``, as its own process: what it shows, and that nothing of it is left."""

from __future__ import annotations

import os
import select
import signal
import subprocess
import sys
from pathlib import Path

import pytest

from trapd.cli.demo.bench import Folder
from trapd.errors import BadRequest
from trapd.record import Reader

COMMAND = [sys.executable, "-m", "trapd.cli", "demo"]


def processes_about(folder: Path) -> list[str]:
    """Command lines of the running processes that name ``folder``."""
    found = []
    for entry in Path("/proc").glob("[0-9]*/cmdline"):
        try:
            words = entry.read_bytes().decode(errors="replace").replace("\0", " ")
        except OSError:  # it has just ended
            continue
        if str(folder) in words:
            found.append(words)
    return found


def wait_for_end(pid: int) -> None:
    """Until the process is gone; at once when it is already."""
    try:
        handle = os.pidfd_open(pid)
    except ProcessLookupError:
        return
    try:
        ended, _, _ = select.select([handle], [], [], 30)
        assert ended, f"process {pid} lives on"
    finally:
        os.close(handle)


@pytest.mark.long
def test_the_demo_shows_a_ramp_a_refusal_and_a_proof_and_leaves_nothing_but_its_files(tmp_path: Path) -> None:
    folder = tmp_path / "demo"
    command = [*COMMAND, "--dir", str(folder), "--for", "1s"]
    ran = subprocess.run(command, capture_output=True, text=True, timeout=120, check=False)
    assert ran.returncode == 0, ran.stderr
    for words in (
        "$ trapd on --why 'start of the day'\ndone  ",
        "$ trapd ions 40Ca+=1 --why 'one on the camera'\nnoted  held: 1 40Ca+",
        "$ trapd set endcaps=200V --why 'stiffer along z'\ndone  endcaps 200 V",
        "$ trapd set drive.amplitude=100V --why 'less heating'\nrefused  nothing was sent",
        "    trapd set drive.amplitude=",
        "$ trapd scan x --why 'first of the day'\npass 1 of 12: f = 2.1",
        "\nfound  2.1",
        "x: x of 40Ca+  2.0992 MHz ± 8.9 kHz  2.1",
        "whole  ",
        f"export TRAPD_AT={folder}/trap.toml",
        f"record --file {folder}/trapd.sqlite",
    ):
        assert words in ran.stdout, words
    assert ran.stderr == ""
    with Reader.open(folder / "trapd.sqlite") as reader:
        assert reader.entries(newest=True, limit=1)[0].kind == "stop"
        assert reader.refusals()[0].why == "less heating"
        assert next(one.why for one in reader.secular_frequencies()) == "first of the day"
    assert processes_about(folder) == []


@pytest.mark.long
@pytest.mark.parametrize("end", [signal.SIGTERM, signal.SIGINT, signal.SIGHUP, signal.SIGKILL])
def test_a_demo_that_is_ended_in_the_middle_leaves_no_process_behind(tmp_path: Path, end: signal.Signals) -> None:
    folder = tmp_path / "demo"
    with subprocess.Popen([*COMMAND, "--dir", str(folder)], stdout=subprocess.PIPE, text=True) as demo:
        assert demo.stdout is not None
        for line in demo.stdout:
            if line.startswith("$ trapd on"):
                break
        children = [int(pid) for pid in Path(f"/proc/{demo.pid}/task/{demo.pid}/children").read_text().split()]
        assert len(children) == 2
        demo.send_signal(end)
        demo.stdout.read()  # to its end, when nobody holds the pipe any more
    assert demo.returncode == (-end if end == signal.SIGKILL else 0)
    for child in children:
        wait_for_end(child)
    assert processes_about(folder) == []


def test_the_demo_does_not_write_over_somebody_s_trap_file(tmp_path: Path) -> None:
    (tmp_path / "trap.toml").write_text('[trap]\nname = "ours"\n')
    with pytest.raises(BadRequest, match="was not written by `trapd demo`"):
        Folder.make(tmp_path)


def test_the_demo_s_folder_can_be_used_again(tmp_path: Path) -> None:
    folder = Folder.make(tmp_path / "demo")
    folder.write_trap_file({"rf": 40001, "dc": 40002, "tickle": 40003, "counter": 40004, "vacuum": 40005})
    again = Folder.make(tmp_path / "demo")
    assert "::40002::" in again.trap_file.read_text()
