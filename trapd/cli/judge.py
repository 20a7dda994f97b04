"""``trapd judge``: the guard's verdict on a state or on a way, without a daemon."""

from __future__ import annotations

from dataclasses import asdict
from pathlib import Path

import click

from trapd.cli.amounts import duration
from trapd.cli.answer import Data, tell
from trapd.cli.options import command, file_argument, ions_option, values_argument
from trapd.cli.terminal import say
from trapd.cli.verdicts import show_values, show_verdict
from trapd.cli.words import split_list
from trapd.config.quantity import parse_assignments
from trapd.errors import GuardRefused


@command(
    "trapd judge trap.toml endcaps=200V",
    "trapd judge trap.toml drive.amplitude=300V --from drive.amplitude=100V,endcaps=50V",
    "trapd judge trap.toml endcaps=200V --ions 40Ca+=2 --json",
)
@file_argument
@values_argument
@click.option(
    "--from", "start", metavar="NAME=VALUE,...", help="Judge the whole way from this state, as `set` would go it."
)
@ions_option
def judge_command(file: Path, values: tuple[str, ...], start: str | None, ions: str | None) -> None:
    """The verdict on a state, or with --from on the way there. Without a daemon.

    A setpoint not named is as in --from, else as in the file's first point. Exit code 0 accepted, 3 refused.
    """
    from trapd.cli.offline import contents_of, read_model, state_of
    from trapd.guard.verdict import judge, judge_move

    config, model = read_model(file)
    contents = contents_of(config, ions)
    if start is None:
        state = state_of(config, model, values)
        verdict = judge(model, contents, state, changed=list(parse_assignments(split_list(values), model.limits)))
        answer = asdict(verdict)
    else:
        begin = state_of(config, model, [start])
        verdict, ramp = judge_move(model, contents, begin, state_of(config, model, values, begin))
        answer = {**asdict(verdict), "from": begin}
        answer |= {"steps": len(ramp.steps) if ramp else None, "duration_s": ramp.duration_s if ramp else None}
    tell(answer, _show, exit_code=0 if verdict.accepted else GuardRefused.exit_code)


def _show(answer: Data) -> None:
    show_verdict(answer, subject="the way there" if "from" in answer else "this state")
    if answer.get("steps") is not None:
        say(f"{answer['steps']} steps, {duration(answer['duration_s'])}")
    say()
    show_values(answer["values"])
