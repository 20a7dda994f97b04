"""What the commands that compute without a daemon begin with: the file, a state of its trap, who is in it."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import click

from trapd.cli.assignments import read_contents, split_list
from trapd.errors import BadRequest, NotFound
from trapd.setpoint import FREQUENCY, Contents

if TYPE_CHECKING:
    from trapd.config.records import Config
    from trapd.guard.model import GuardModel


def file_argument(command: Callable[..., None]) -> Callable[..., None]:
    return click.argument("file", type=click.Path(path_type=Path))(command)


def ions_option(command: Callable[..., None]) -> Callable[..., None]:
    text = "What is in the trap: 40Ca+=2, several with commas, or none. Default: one of every species of the file."
    return click.option("--ions", metavar="SPECIES=N,...", help=text)(command)


def read_model(file: Path) -> tuple[Config, GuardModel]:
    from trapd.config.build import guard_of
    from trapd.config.read import read

    config = read(file)
    return config, guard_of(config)


def contents_of(config: Config, text: str | None) -> Contents:
    """``--ions``, or the whole catalogue as held."""
    if text is None:
        return Contents(presence="held", ions=dict.fromkeys(config.species, 1))
    from trapd.config.quantity import closest

    contents = read_contents([text])
    for name in (*contents.ions, *contents.incoming):
        if name not in config.species:
            raise NotFound(f'--ions: "{name}" is no species of this file{closest(name, config.species)}')
    return contents


def state_of(
    config: Config, model: GuardModel, words: Sequence[str], start: Mapping[str, float] | None = None
) -> dict[str, float]:
    """The state that ``words`` name. What they leave out is as in ``start``, else as in the file's first point, where an
    electrode it does not name stands at 0 V."""
    from trapd.config.quantity import parse_assignments
    from trapd.guard.limits import realised

    named = parse_assignments(split_list(words), model.limits)
    base = dict(start) if start is not None else first_point(config, model)
    values = {**base, **named}
    missing = [name for name in model.limits if name not in values]
    if missing:
        raise BadRequest(f"{config.source.name} has no [points] to begin from; name {', '.join(missing)} as well")
    return realised(model, {name: values[name] for name in model.limits})


def first_point(config: Config, model: GuardModel) -> dict[str, float]:
    """Where offline commands begin; empty for a file without points."""
    if not config.points:
        return {}
    point = next(iter(config.points.values()))
    return {name: 0.0 for name in model.limits if name != FREQUENCY} | dict(point)
