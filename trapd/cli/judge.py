"""``trapd judge``: the guard's verdict on a state or on a way, without a daemon."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import click

from trapd.cli.answer import examples, json_option, leave_with, plain, tell_json, wants_json
from trapd.cli.offline import contents_of, file_argument, ions_option, read_model, state_of
from trapd.errors import GuardRefused


@click.command(
    "judge",
    short_help="The verdict on a state, or on the way there.",
    epilog=examples(
        "trapd judge trap.toml endcaps=200V",
        "trapd judge trap.toml drive.amplitude=300V --from drive.amplitude=100V,endcaps=50V",
        "trapd judge trap.toml endcaps=200V --ions 40Ca+=2 --json",
    ),
)
@file_argument
@click.argument("values", nargs=-1, metavar="[NAME=VALUE]...")
@click.option(
    "--from", "start", metavar="NAME=VALUE,...", help="Judge the whole way from this state, as `set` would go it."
)
@ions_option
@json_option
def judge_command(file: Path, values: tuple[str, ...], start: str | None, ions: str | None) -> None:
    """The verdict on a state, or with --from on the way there, without a daemon.

    A setpoint not named is as in --from, else as in the file's first point. Exit code 0 accepted, 3 refused.
    """
    config, model = read_model(file)
    contents = contents_of(config, ions)
    from trapd.guard.verdict import judge, judge_move

    if start is None:
        verdict = judge(model, contents, state_of(config, model, values))
        answer = plain(verdict)
    else:
        begin = state_of(config, model, [start])
        verdict, ramp = judge_move(model, contents, begin, state_of(config, model, values, begin))
        answer = {**plain(verdict), "from": begin}
        answer |= {"steps": len(ramp.steps) if ramp else None, "duration_s": ramp.duration_s if ramp else None}
    if wants_json():
        tell_json(answer)
    else:
        _show(answer)
    leave_with(0 if verdict.accepted else GuardRefused.exit_code)


def _show(answer: Mapping[str, Any]) -> None:
    from trapd.cli.amounts import duration
    from trapd.cli.terminal import say
    from trapd.cli.verdicts import show_values, show_verdict

    show_verdict(answer, subject="the way there" if "from" in answer else "this state")
    if answer.get("steps") is not None:
        say(f"{answer['steps']} steps, {duration(answer['duration_s'])}")
    say()
    show_values(answer["values"])
