"""``trapd verify``: prove the record."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import click

from trapd.cli.answer import examples, json_option, leave_with, plain, tell_json, wants_json
from trapd.cli.daemon import connect, daemon_option, not_both
from trapd.errors import BadRequest, RecordDamaged


@click.command(
    "verify",
    short_help="Prove that the record is whole.",
    epilog=examples(
        "trapd verify", "trapd verify --file trapd.sqlite", "trapd verify --file trapd.sqlite --head 3f9c..."
    ),
)
@click.option("--file", type=click.Path(path_type=Path), help="Verify this record, not a daemon's.")
@click.option("--head", metavar="DIGEST", help="A digest noted elsewhere, that must be in the record (64 hex digits).")
@json_option
@daemon_option
def verify_command(file: Path | None, head: str | None, at: str | None) -> None:
    """Prove that the record is whole: its chain, every row against its entry, its schema.

    A record that somebody rewrote from end to end is found only by a head noted elsewhere (--head). Exit code 0 whole,
    6 not.
    """
    not_both(file, at)
    if head is not None and not (len(head) == 64 and set(head) <= set("0123456789abcdef")):
        raise BadRequest(f'--head "{head}": expected the 64 hexadecimal digits of a digest')
    report = _verify_file(file, head) if file is not None else _verify_daemon(at, head)
    if wants_json():
        tell_json(report)
    else:
        _show(report, head)
    leave_with(0 if report["ok"] else RecordDamaged.exit_code)


def _verify_file(file: Path, head: str | None) -> dict[str, Any]:
    from trapd.record import verify

    report = verify(file, head=head)
    return {**plain(report), "problems": [problem._asdict() for problem in report.problems]}


def _verify_daemon(at: str | None, head: str | None) -> dict[str, Any]:
    with connect(at) as client:
        return dict(client.verify(head=head))


def _show(report: Mapping[str, Any], head: str | None) -> None:
    from trapd.cli.terminal import BAD, GOOD, say, say_parts, table

    if not report["ok"]:
        number = report["problem_count"]
        say_parts(
            ("not whole", BAD), (f"  {number} problem{'s' if number > 1 else ''} in {report['entries']} entries", "")
        )
        lines = [(str(one["seq"] or "-"), one["table"], one["message"]) for one in report["problems"]]
        table((">entry", "where", "what is wrong"), lines, indent=2)
        return
    say_parts(("whole", GOOD), (f"  {report['entries']} entries, {report['first_seq']} to {report['last_seq']}", ""))
    say(f"head {report['head']}")
    if head is None:
        say("Note the head elsewhere: only that finds a record that was rewritten from end to end.", "dim")
    else:
        say("the noted head is in it")
