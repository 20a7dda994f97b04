"""What the demo shows: ordinary commands, run as anybody would type them, with a sentence before each."""

from __future__ import annotations

import shlex
from collections.abc import Sequence

import click

from trapd.cli.demo.bench import Folder
from trapd.cli.terminal import FAINT, STRONG, say
from trapd.errors import NotConfirmed, Refused

STORY: tuple[tuple[str, str], ...] = (
    (
        "The daemon found everything off and touched nothing. So nothing can be in the trap.",
        "status",
    ),
    (
        "Switch on: supplies at 0 V, RF at its least level, then a judged ramp to the first point of the file.",
        "on --why 'start of the day'",
    ),
    (
        "Ions come in. What is in the trap is said by a person, and stands in the record.",
        "ions loading 40Ca+ --why 'oven on'",
    ),
    (
        "From here on every move is held to what keeps these two.",
        "ions 40Ca+=2 --why 'two on the camera'",
    ),
    (
        "A setpoint: judged over the whole way, written down, then sent step by step and read back.",
        "set endcaps=200V --why 'stiffer along z'",
    ),
    (
        "One that would lose them. A refusal is an answer: the rule, the numbers, the nearest value that is allowed.",
        "set drive.amplitude=100V --why 'less heating'",
    ),
    (
        "All of it is in the record, every command on disk before it was sent.",
        "record --setpoints --limit 4",
    ),
    ("What was refused is there as well, and why.", "record --refused --since 1min"),
    ("And the record can be proved.", "verify"),
)
"""A sentence, and the command that shows what it says."""


def tell_story() -> None:
    """Raises when a command ends other than as told: done, or refused."""
    from trapd.cli.program import PROGRAM  # which loads this file for its help

    for sentence, command in STORY:
        say()
        say(sentence)
        say(("$ ", FAINT), (f"trapd {command}", STRONG))
        code = PROGRAM.main(shlex.split(command), prog_name="trapd", standalone_mode=False)
        if code not in (None, 0, Refused.exit_code):
            raise NotConfirmed(f"the demo ends here: `trapd {command}` left with exit code {code}")


def say_how_to_talk(folder: Folder, program: str) -> None:
    """Everything to paste, in the order in which one would try it."""
    alias = [] if program == "trapd" else [(f"alias trapd={shlex.quote(program)}", "")]
    try_these: Sequence[tuple[str, str]] = (
        (f"export TRAPD_AT={shlex.quote(str(folder.trap_file))}", "where commands find this daemon"),
        *alias,
        ("trapd status", "what it is doing"),
        ('trapd window "$TRAPD_AT" endcaps=200V', "how far each setpoint may go"),
        ("trapd set endcaps=120V --why 'back again'", "a setpoint of yours, good or bad"),
        ("trapd record --setpoints --since 1min", "what was sent and read back"),
        (
            f"sqlite3 {shlex.quote(str(folder.record))} 'SELECT * FROM refusals'",
            "the record is one SQLite file, readable while the daemon writes",
        ),
        ("trapd off", "always there"),
    )
    say()
    say(("It keeps running. In another terminal:", STRONG))
    for command, remark in try_these:
        if remark:
            say((f"# {remark}", FAINT), indent=2)
        click.echo(f"  {command}")  # not wrapped: it is there to be copied
    say()
    say((f"The daemon's log, with its HTTP address: {folder.log}", FAINT))
