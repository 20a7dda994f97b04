"""What the commands that compute without a daemon begin with: the file, a state of its trap, who is in it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

from trapd.cli.words import read_contents, split_list
from trapd.config.build import guard_of
from trapd.config.quantity import closest, parse_assignments
from trapd.config.read import read
from trapd.config.records import Config
from trapd.errors import BadRequest, NotFound
from trapd.guard.limits import realised
from trapd.guard.model import GuardModel
from trapd.setpoint import FREQUENCY, Contents


def read_model(file: Path) -> tuple[Config, GuardModel]:
    config = read(file)
    return config, guard_of(config)


def contents_of(config: Config, text: str | None) -> Contents:
    """``--ions``, or the whole catalogue as held."""
    if text is None:
        return Contents(presence="held", ions=dict.fromkeys(config.species, 1))
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
    begin = first_point(config, model) if start is None else start
    values = {**begin, **parse_assignments(split_list(words), model.limits)}
    missing = [name for name in model.limits if name not in values]
    if missing:
        raise BadRequest(f"{config.source.name} has no [points] to begin from; name {', '.join(missing)} as well")
    return realised(model, {name: values[name] for name in model.limits})


def first_point(config: Config, model: GuardModel) -> dict[str, float]:
    """Where offline commands begin; empty for a file without points."""
    if not config.points:
        return {}
    return {name: 0.0 for name in model.limits if name != FREQUENCY} | dict(next(iter(config.points.values())))
