"""Each deliberate mistake of `mutations.py` is made in a copy of the project, and its tests must then fail."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

from tests.mutations import MUTATIONS, Mutation

ROOT = Path(__file__).resolve().parent.parent
COPIED = ("trapd", "drivers", "migrations", "tests", "pyproject.toml", "README.md", "DEVELOPERS.md")


@pytest.fixture(scope="class")
def copy(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("mutant")
    for name in COPIED:
        if (ROOT / name).is_dir():
            shutil.copytree(ROOT / name, folder / name, ignore=shutil.ignore_patterns("__pycache__", "*.sqlite*"))
        else:
            shutil.copy(ROOT / name, folder / name)
    return folder


def _third(number: int) -> pytest.MarkDecorator:
    return pytest.mark.parametrize("mutation", MUTATIONS[number::3], ids=lambda one: one.name.replace(" ", "_"))


@pytest.mark.long
class TestFirstThird:
    """Three classes, so that three processes can share the work."""

    @_third(0)
    def test_a_deliberate_mistake_is_caught(self, copy: Path, mutation: Mutation) -> None:
        _must_be_caught(copy, mutation)


@pytest.mark.long
class TestSecondThird:
    @_third(1)
    def test_a_deliberate_mistake_is_caught(self, copy: Path, mutation: Mutation) -> None:
        _must_be_caught(copy, mutation)


@pytest.mark.long
class TestLastThird:
    @_third(2)
    def test_a_deliberate_mistake_is_caught(self, copy: Path, mutation: Mutation) -> None:
        _must_be_caught(copy, mutation)


def _must_be_caught(copy: Path, mutation: Mutation) -> None:
    source = copy / mutation.file
    original = source.read_text(encoding="utf-8")
    assert original.count(mutation.old) == 1, f"{mutation.file} no longer reads as this mutation expects"
    source.write_text(original.replace(mutation.old, mutation.new), encoding="utf-8")
    try:
        done = _run_tests(copy, mutation.caught_by)
    finally:
        source.write_text(original, encoding="utf-8")
    # 1: a test failed. Anything else (2 interrupted, 4 no such test, 5 none collected) proves nothing.
    assert done.returncode == 1, f"not caught by {', '.join(mutation.caught_by)}:\n{done.stdout[-3000:]}"


def _run_tests(folder: Path, tests: tuple[str, ...]) -> subprocess.CompletedProcess[str]:
    command = [
        sys.executable,
        "-m",
        "pytest",
        "-q",
        "-x",
        "-p",
        "no:cacheprovider",
        "--basetemp",
        str(folder / "tmp"),
        *tests,
    ]
    paths = os.pathsep.join((str(folder), str(folder / "drivers")))
    environment = {**os.environ, "PYTHONPATH": paths, "PYTHONDONTWRITEBYTECODE": "1"}
    return subprocess.run(
        command, cwd=folder, env=environment, capture_output=True, text=True, timeout=300, check=False
    )
