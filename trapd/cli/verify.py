"""``trapd verify``: prove the record."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path
from typing import Any

import click

from trapd.cli.answer import Data, tell
from trapd.cli.options import at_option, command
from trapd.cli.record import one_source
from trapd.cli.terminal import BAD, FAINT, GOOD, say, table
from trapd.client import Client
from trapd.errors import BadRequest, RecordDamaged


@command("trapd verify", "trapd verify --file trapd.sqlite", "trapd verify --file trapd.sqlite --head 3f9c...")
@click.option("--file", type=click.Path(path_type=Path), help="Verify this record, not a daemon's.")
@click.option("--head", metavar="DIGEST", help="A digest noted elsewhere, that must be in the record (64 hex digits).")
@at_option
def verify_command(file: Path | None, head: str | None, at: str | None) -> None:
    """Prove that the record is whole. Its chain, every row against its entry, its schema.

    A record that somebody rewrote from end to end is found only by a head noted elsewhere (--head). Exit code 0 whole,
    6 not.
    """
    one_source(file, at)
    if head is not None and not (len(head) == 64 and set(head) <= set("0123456789abcdef")):
        raise BadRequest(f'--head "{head}": expected the 64 hexadecimal digits of a digest')

    def show(report: Data) -> None:
        if not report["ok"]:
            _show_problems(report)
            return
        span = f"  {report['entries']} entries, {report['first_seq']} to {report['last_seq']}"
        say(("whole", GOOD), span)
        say(f"head {report['head']}")
        if head is not None:
            say("the noted head is in it")
        else:
            say(("Note the head elsewhere: only that finds a record that was rewritten from end to end.", FAINT))

    report = _verify(file, head, at)
    tell(report, show, exit_code=0 if report["ok"] else RecordDamaged.exit_code)


def _verify(file: Path | None, head: str | None, at: str | None) -> dict[str, Any]:
    if file is None:
        with Client(at) as client:
            return client.verify(head=head)
    from trapd.record import verify

    report = verify(file, head=head)
    return {**asdict(report), "problems": [problem._asdict() for problem in report.problems]}


def _show_problems(report: Data) -> None:
    number = report["problem_count"]
    problems = f"  {number} problem{'s' if number > 1 else ''} in {report['entries']} entries"
    say(("not whole", BAD), problems)
    lines = [(str(one["seq"] or "-"), one["table"], one["message"]) for one in report["problems"]]
    table((">entry", "where", "what is wrong"), lines, indent=2)
