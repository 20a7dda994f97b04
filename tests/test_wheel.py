"""The wheel alone, as somebody who installs trapd has it: its demo from an empty folder, with nothing of this checkout.

Nothing is downloaded. What trapd needs is lent by the environment of the tests, behind the new environment's own packages.
"""

from __future__ import annotations

import os
import re
import subprocess
import sys
import venv
from dataclasses import dataclass
from pathlib import Path

import pytest

from trapd.record import Reader, verify

ROOT = Path(__file__).resolve().parent.parent
PACKAGES = ("trapd", "trapd_drivers", "trapd_simulated")
ENOUGH_S = 120.0


@dataclass(frozen=True)
class Installed:
    """A new environment with the wheel, and an empty folder to work in."""

    environment: Path
    empty: Path

    def run(self, program: str, *arguments: str) -> subprocess.CompletedProcess[str]:
        command = [str(self.environment / "bin" / program), *arguments]
        kept = {name: text for name, text in os.environ.items() if not name.startswith(("PYTHON", "TRAPD_"))}
        settings = {**kept, "TMPDIR": str(self.empty.parent)}
        return run(*command, folder=self.empty, settings=settings)


def run(*command: str, folder: Path, settings: dict[str, str] | None = None) -> subprocess.CompletedProcess[str]:
    ran = subprocess.run(
        command, cwd=folder, env=settings, capture_output=True, text=True, timeout=ENOUGH_S, check=False
    )
    assert ran.returncode == 0, f"{' '.join(command)}\n{ran.stdout[-2000:]}\n{ran.stderr[-2000:]}"
    return ran


@pytest.fixture(scope="module")
def installed(tmp_path_factory: pytest.TempPathFactory) -> Installed:
    folder = tmp_path_factory.mktemp("wheel")
    run(sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(folder), folder=ROOT)
    (wheel,) = folder.glob("*.whl")
    environment, empty = folder / "env", folder / "empty"
    empty.mkdir()
    venv.create(environment)
    python = str(environment / "bin" / "python")
    run(sys.executable, "-m", "pip", "--python", python, "install", "--no-index", "--no-deps", str(wheel), folder=empty)
    (own,) = environment.glob("lib/python*/site-packages")
    lent = [path for path in sys.path if Path(path).name in ("site-packages", "dist-packages")]
    # Only the folders themselves: a .pth file in one of them, such as that of an editable install, is not followed.
    (own / "lent.pth").write_text("\n".join(lent) + "\n", encoding="utf-8")
    return Installed(environment=environment, empty=empty)


@pytest.mark.long
def test_what_runs_is_the_wheel(installed: Installed) -> None:
    code = f"import {', '.join(PACKAGES)}; print(*(one.__file__ for one in ({', '.join(PACKAGES)})), sep='\\n')"
    files = installed.run("python", "-c", code).stdout.split("\n")[: len(PACKAGES)]
    assert [Path(one).parent.name for one in files] == list(PACKAGES)
    assert all(Path(one).is_relative_to(installed.environment) for one in files)


@pytest.mark.long
def test_the_wheel_shows_the_demo_and_leaves_its_record(installed: Installed) -> None:
    ran = installed.run("trapd", "demo", "--for", "1s")
    assert ran.stderr == ""
    for words in (
        "$ trapd set endcaps=200V --why 'stiffer along z'\ndone  endcaps 200 V",
        "$ trapd set drive.amplitude=100V --why 'less heating'\nrefused  nothing was sent",
        "$ trapd scan x --why 'first of the day'\n",
        "\nfound  2.1",
        "whole  ",
    ):
        assert words in ran.stdout, words
    left = re.search(r"What is left: (.+)$", ran.stdout, re.MULTILINE)
    assert left is not None
    record = Path(left[1]) / "trapd.sqlite"
    assert verify(record).ok
    with Reader.open(record) as reader:
        measured = reader.secular_frequencies()
    assert next((one.scan, one.mode, one.species) for one in measured) == ("x", "x", "40Ca+")
    assert list(installed.empty.iterdir()) == []
