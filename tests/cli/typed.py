"""Commands as a person types them, run in this process."""

from __future__ import annotations

import json
import shlex
from dataclasses import dataclass
from typing import Any

from click.testing import CliRunner

from trapd.cli.program import PROGRAM


@dataclass(frozen=True, kw_only=True)
class Ended:
    """What a command left behind."""

    code: int
    out: str
    err: str

    @property
    def json(self) -> Any:
        return json.loads(self.out)


def trapd(line: str, **environment: str) -> Ended:
    """``trapd LINE``; an exception that no command turned into words is raised here."""
    result = CliRunner().invoke(PROGRAM, shlex.split(line), env={"NO_COLOR": None, **environment}, prog_name="trapd")
    if result.exception is not None and not isinstance(result.exception, SystemExit):
        raise result.exception
    return Ended(code=result.exit_code, out=result.stdout, err=result.stderr)
