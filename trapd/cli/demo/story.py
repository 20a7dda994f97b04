"""What the demo shows: ordinary commands, run as anybody would type them, with a sentence before each."""

from __future__ import annotations

import shlex
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import click

from trapd.cli.demo.bench import Folder
from trapd.cli.terminal import FAINT, STRONG, say
from trapd.errors import NotConfirmed, Refused


@dataclass(frozen=True)
class Scene:
    """A sentence, and the command that shows what it says. ``bench``: what happens at the simulated bench before it."""

    sentence: str
    command: str
    bench: str | None = None


STORY: tuple[Scene, ...] = (
    Scene(
        "The daemon found everything off and touched nothing. So nothing can be in the trap. Switch on: supplies at 0 V, RF "
        "at its least level, then a judged ramp to the first point of the file.",
        "on --why 'start of the day'",
    ),
    Scene(
        "An ion comes in. What is in the trap is said by a person, and stands in the record.",
        "ions loading 40Ca+ --why 'oven on'",
    ),
    Scene(
        "From here on every move is held to what keeps this one.",
        "ions 40Ca+=1 --why 'one on the camera'",
        bench="load",
    ),
    Scene(
        "A setpoint: judged over the whole way, written down, then sent step by step and read back.",
        "set endcaps=200V --why 'stiffer along z'",
    ),
    Scene(
        "One that would lose it. A refusal is an answer: the rule, the numbers, the nearest value that is allowed.",
        "set drive.amplitude=100V --why 'less heating'",
    ),
    Scene(
        "Where does the ion really oscillate? A weak tickle in short bursts, photons counted, in random order, until the "
        "uncertainty is what the file asks for.",
        "scan x --why 'first of the day'",
    ),
    Scene("Predicted and measured side by side; the schedule goes on measuring.", "status"),
    Scene(
        "All of it is in the record, every command on disk before it was sent; and the record can be proved.", "verify"
    ),
)


def tell_story(bench: Callable[[str], None]) -> None:
    """``bench`` does something at the simulated bench. Raises when a command ends other than as told: done, or refused."""
    from trapd.cli.program import PROGRAM  # which loads this file for its help

    for scene in STORY:
        say()
        say(scene.sentence)
        if scene.bench is not None:
            bench(scene.bench)
        say(("$ ", FAINT), (f"trapd {scene.command}", STRONG))
        code = PROGRAM.main(shlex.split(scene.command), prog_name="trapd", standalone_mode=False)
        if code not in (None, 0, Refused.exit_code):
            raise NotConfirmed(f"the demo ends here: `trapd {scene.command}` left with exit code {code}")


def say_how_to_talk(folder: Folder, program: str) -> None:
    """Everything to paste, in the order in which one would try it."""
    alias = [] if program == "trapd" else [(f"alias trapd={shlex.quote(program)}", "")]
    try_these: Sequence[tuple[str, str]] = (
        (f"export TRAPD_AT={shlex.quote(str(folder.trap_file))}", "where commands find this daemon"),
        *alias,
        ("trapd status", "what it is doing"),
        ('trapd window "$TRAPD_AT" endcaps=200V', "how far each setpoint may go"),
        ("trapd set endcaps=120V --why 'back again'", "a setpoint of yours, good or bad"),
        ("trapd scan z", "measure the axial frequency now"),
        ("trapd record --setpoints --since 1min", "what was sent and read back"),
        (
            f"sqlite3 {shlex.quote(str(folder.record))} 'SELECT * FROM frequencies'",
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
