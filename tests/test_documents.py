"""Documents that can rot are tested: what a user may type or meet stands in README.md."""

from __future__ import annotations

from pathlib import Path

import click
import pytest

from trapd import errors
from trapd.cli.program import PROGRAM
from trapd.config.keys import KEYS
from trapd.guard.rules import RULES

ROOT = Path(__file__).resolve().parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")


def every_error() -> list[type[errors.TrapdError]]:
    """Those of the tree itself, by name."""
    found = [one for one in vars(errors).values() if isinstance(one, type) and issubclass(one, errors.TrapdError)]
    return sorted(found, key=lambda one: one.__name__)


LEAVES = [one for one in every_error() if not any(other.__base__ is one for other in every_error())]


@pytest.mark.parametrize("command", PROGRAM.list_commands(click.Context(PROGRAM)))
def test_every_command_stands_in_the_readme(command: str) -> None:
    assert f"`trapd {command}" in README


@pytest.mark.parametrize("key", KEYS)
def test_every_key_of_a_trap_file_stands_in_the_readme(key: str) -> None:
    assert f"`{key}`" in README


@pytest.mark.parametrize(("rule", "sentence"), RULES.items())
def test_every_rule_stands_in_the_readme_with_its_sentence(rule: str, sentence: str) -> None:
    row = next(line for line in README.splitlines() if line.startswith(f"| `{rule}` |"))
    assert sentence.replace("`", "") in row.replace("`", "")


@pytest.mark.parametrize("kind", LEAVES, ids=lambda one: one.__name__)
def test_every_error_a_user_can_meet_stands_in_the_readme_with_its_status(kind: type[errors.TrapdError]) -> None:
    assert f"| `{kind.code}` | {kind.http_status} |" in README


def test_exit_codes_are_those_of_the_readme() -> None:
    assert {one.exit_code for one in every_error()} == {1, 2, 3, 4, 5, 6}
    said = " ".join(README.split("Exit codes:")[1].splitlines()[:2])
    assert all(f"{code} " in said for code in range(7))


def test_the_two_lines_of_the_readme_are_those_that_ci_and_newcomers_run() -> None:
    venv = "python3 -m venv .venv && .venv/bin/pip install -q -c .constraints.txt"
    check = f"{venv} -e '.[test]' && .venv/bin/python -m tests.check"
    assert f"{venv} . && .venv/bin/trapd demo" in README
    assert check in README
    assert check in (ROOT / ".ci" / "run").read_text(encoding="utf-8")


def test_the_trap_file_of_the_readme_is_one(tmp_path: Path) -> None:
    from trapd.config.read import read

    text = README.split("```toml\n")[1].split("```")[0]
    file = tmp_path / "trap.toml"
    file.write_text(text, encoding="utf-8")
    assert read(file).trap.name == "north bench"


def test_the_sql_of_the_readme_runs(tmp_path: Path) -> None:
    import sqlite3

    from trapd.clock import SystemClock
    from trapd.record import Record

    record = Record.open(tmp_path / "r.sqlite", clock=SystemClock(), boot_id="test")
    record.close()
    with sqlite3.connect(tmp_path / "r.sqlite") as db:
        db.executescript(README.split("```sql\n")[1].split("```")[0])


@pytest.mark.parametrize("package", sorted(p.name for p in (ROOT / "trapd").iterdir() if (p / "__init__.py").exists()))
def test_every_package_stands_in_the_guide_for_contributors(package: str) -> None:
    assert f"`{package}/`" in DEVELOPERS


def test_nothing_at_the_top_level_but_what_belongs_there() -> None:
    import subprocess

    tracked = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False).stdout.split()
    top = {name.split("/")[0] for name in tracked}
    allowed = {"README.md", "DEVELOPERS.md", "pyproject.toml", "trapd", "drivers", "tests", "migrations"}
    assert {name for name in top if not name.startswith(".")} <= allowed
