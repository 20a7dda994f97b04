"""Whatever is in a trap file, reading it gives a configuration or tells every mistake with the file's name, soon."""

from __future__ import annotations

import json
import re
import time
from pathlib import Path
from random import Random

import pytest
from hypothesis import strategies as st

from tests.fuzz.box import fuzz
from tests.traps import NORTH_BENCH, RING, SCANS, TENSOR
from trapd.config.build import guard_of
from trapd.config.digest import as_data
from trapd.config.read import read
from trapd.errors import ConfigError

LONGEST_S = 5.0
CONTROL = re.compile(r"[\x00-\x09\x0b-\x1f\x7f-\x9f]")
"""What would break a line in two, or tell a terminal to do something."""

VALID = [NORTH_BENCH, NORTH_BENCH + SCANS, RING, TENSOR]
LINES = sorted({line for text in VALID for line in text.splitlines() if line})
WORDS = sorted({word for text in VALID for word in re.findall(r"[A-Za-z_][A-Za-z_0-9]*", text)})
NUMBERS = ["0", "-1", "1e308", "1e-308", "-0.0", "5e-324", "9" * 400, "1e400", "0.1e-999", "1_0", "0x10", "007", "+1"]
UNITS = ["Hz", "MHz", "V", "mV", "V/V", "V/s", "mm", "%", "eV", "kg", "e", "/s", "s", "ppm", "u", "m^9", "V*V/V", "µV"]
VALUES = ["true", "nan", "inf", "1979-05-27", "07:32:00"]
VALUES += ["[]", "{}", "[[1]]", "[{}]", '""', "''", '"\\u0000"', "'''x'''"]
STRANGE = ["\r", "\x00", "\x1b[2J", "\u2028", "\ud800", "e" * 10_000, '"a\\nb" = 1', "\\n", "\\u001b[2J"]
STRANGE += ["[" * 500, "a." * 500]
CRONS = ["* * * * *", "0 0 31 2 *", "*/0 * * * *", "60 * * * *", "1-0 * * * *", "@daily", "* * * *", "0 0 29 2 1"]


def mutated(text: str, random: Random, strange: str) -> str:
    """``text`` after a few changes; ``strange`` is put in where a change puts in any text."""
    lines = text.splitlines()
    for _ in range(random.choice((1, 1, 1, 2, 3, 8))):
        place = random.randrange(len(lines))
        lines[place : place + 1] = random.choice(CHANGES)(lines[place], random, strange)
        if random.random() < 0.1:
            other = random.randrange(len(lines) or 1)
            if len(lines) > max(place, other):
                lines[place], lines[other] = lines[other], lines[place]
        if not lines:
            lines = [strange]
    return "\n".join(lines)


def _instead(pattern: str, line: str, random: Random, new: str) -> list[str]:
    """The line with one match of the pattern replaced."""
    found = list(re.finditer(pattern, line))
    if not found:
        return [line]
    one = random.choice(found)
    return [line[: one.start()] + new + line[one.end() :]]


def _anywhere(line: str, random: Random, strange: str) -> list[str]:
    place = random.randint(0, len(line))
    return [line[:place] + strange + line[place + random.randint(0, 2) :]]


NUMBER, QUANTITY = r"-?[0-9][0-9.e]*", r'"-?[0-9][^"]*"'
CHANGES = [
    lambda line, random, strange: [],
    lambda line, random, strange: [line, line],
    lambda line, random, strange: [line, random.choice(LINES)],
    lambda line, random, strange: _instead(NUMBER, line, random, random.choice(NUMBERS)),
    lambda line, random, strange: _instead(
        NUMBER, line, random, f"{random.uniform(-10, 10) * 10 ** random.randint(-9, 9):g}"
    ),
    lambda line, random, strange: _instead(r"(?<=[0-9] )[A-Za-z%/]+", line, random, random.choice(UNITS)),
    lambda line, random, strange: _instead(
        QUANTITY, line, random, f'"{random.choice(NUMBERS)} {random.choice(UNITS)}"'
    ),
    lambda line, random, strange: _instead(r"(?<== ).*", line, random, random.choice(VALUES)),
    lambda line, random, strange: _instead(r'"[^"]*"', line, random, random.choice(NUMBERS)),
    lambda line, random, strange: _instead(r'(?<=").*(?=")', line, random, random.choice(CRONS)),
    lambda line, random, strange: _instead(r"[A-Za-z_]+", line, random, random.choice(WORDS)),
    lambda line, random, strange: _instead(r'(?<=").*(?=")', line, random, strange),
    _anywhere,
]
"""Each makes of one line none or some."""


def assert_read_or_told(file: Path, content: bytes) -> bool:
    """Whether it was read; else each line of the message names the file."""
    file.write_bytes(content)
    message, began_s = "", time.monotonic()
    try:
        config = read(file)
        # what a daemon does with it before anything is opened
        json.dumps(as_data(config), allow_nan=False)
        guard_of(config)
    except ConfigError as error:
        message = error.message
    assert time.monotonic() - began_s < LONGEST_S
    assert all(line.startswith(f"{file}: ") for line in message.splitlines()), message
    assert not CONTROL.search(message), repr(message)
    return not message


@pytest.mark.long
def test_a_mutated_trap_file_is_read_or_every_mistake_is_told_with_the_files_name(tmp_path: Path) -> None:
    read_count = 0

    def one(text: str, seed: int, strange: str) -> None:
        nonlocal read_count
        content = mutated(text, Random(seed), strange).encode("utf-8", "surrogatepass")
        try:
            read_count += assert_read_or_told(tmp_path / "trap.toml", content)
        except Exception as error:
            error.add_note(content.decode("utf-8", "replace"))
            raise

    strange = st.text(st.characters(), max_size=20) | st.sampled_from(STRANGE)
    count = fuzz(0.1, one, st.sampled_from(VALID), st.integers(0, 2**32), strange, least=200)
    print(f"{count} files, {read_count} of them read")
    assert 0.02 * count < read_count < 0.9 * count, "the mutations are too coarse or too fine"
