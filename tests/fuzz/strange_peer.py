"""An instrument that mostly answers as its dialect profile says, and now and then as no instrument should."""

from __future__ import annotations

import socket
import tomllib
from collections.abc import Iterator
from pathlib import Path
from random import Random
from typing import Any

from tests.drivers.peer import IDENTITY

# IEEE 488.2-1992 8.7 (forms of numbers) and SCPI-1999 volume 1, 7.2.1 (9.9E37, 9.91E37), both [mem]; the rest is none.
NUMBERS = [
    *("9.9E37", "-9.9E37", "9.91E37", "9.8E37", "-9.8E37", "1E38", "1e400", "-1e400", "1e-400", "1e5000"),
    *("-0", "+1.", ".5", ".", "", "1.5.2", "0x1F", "#H1F", "1,5", "1 2", "1_0", "1,2,3", "NAN", "INF", "-INF", "NaN"),
    *("7000", "-7000", "0.1", "-1", "3", "128", "255", "1e3", "ON", "OFF", "on", "MAYBE", "9" * 400, "0." + "0" * 400),
    *("9" * 4000, "9" * 4400, "0,0", '0,"No error"', "\t1\t", "1;1"),
]
ENTRIES = [
    *('+0,"No error"', "0", "0,", '0,"', '-113,"Undefined header"', '-222,"Data out of range;a ""quoted"" word"'),
    *('-500,"Power on"', '-350,"Queue overflow"', '902,"x"', '903,"x"', "No error", '-113,"a",5', '1e3,"x"'),
    *(f'-{"1" * 4000},"x"', f'-{"1" * 4400},"x"', '-113,"\x00"'),
]


class StrangePeer:
    """For `tests.drivers.peer.Peer`: ``behave`` by a profile, its whims drawn from ``random``, one in ``every`` replies."""

    def __init__(self, profile: Path, random: Random, every: int) -> None:
        table = tomllib.loads(profile.read_text(encoding="utf-8"))
        self._status = {"identity": "*IDN?", "error": "SYST:ERR?", **table["status"]}
        self._end = table["wire"].get("read_end", "\n").encode()
        self._random, self._every = random, every
        self._forms = dict(_forms(table))
        self.last: list[tuple[str, bytes]] = []

    def behave(self, connection: socket.socket, message: str) -> None:
        if "?" not in message:
            return
        right, odd = self._replies(message)
        reply = right.encode() + self._end
        if self._random.randrange(self._every) == 0:
            reply = self._strange(right, odd)
        self.last = [*self.last[-20:], (message, reply)]
        if reply == b"":
            connection.shutdown(socket.SHUT_RDWR)
        elif reply != b"mute":
            connection.sendall(reply)

    def _replies(self, message: str) -> tuple[str, list[str]]:
        """The right one, and others of its kind."""
        if message == self._status["identity"]:
            return IDENTITY, ["MAKER,OTHER,2,1.0", "MAKER", ",,,", "a,b,c,d,e", "1"]
        if message.endswith(self._status["error"]):
            return '0,"No error"', ENTRIES
        if message == self._status.get("events"):
            return "0", NUMBERS
        form, right = next((found for query, found in self._forms.items() if _asks(message, query)), ("{value}", "1"))
        return form.replace("{value}", right), [form.replace("{value}", one) for one in NUMBERS]

    def _strange(self, right: str, odd: list[str]) -> bytes:
        text, end, random = right.encode(), self._end, self._random
        kinds: list[bytes] = [random.choice(odd).encode() + end] * 12
        kinds += [random.randbytes(random.randint(0, 40)) + end] * 4
        kinds += [text + end + text + end, text + end + b"\x00", end, end + text + end, b" " * 100 + text + end]
        kinds += [b"x" * 30_000 + end, text[: len(text) // 2], b"mute", b""]
        return random.choice(kinds)


def _asks(message: str, query: str) -> bool:
    before, channel, after = query.partition("{channel}")
    return message == query or (bool(channel) and message.startswith(before) and message.endswith(after))


def _forms(table: dict[str, Any], reply: str = "{value}") -> Iterator[tuple[str, tuple[str, str]]]:
    """Each query of a profile, with its reply's form and a value in it."""
    reply = table.get("reply", reply)
    words = table.get("off_words") or (["0"] if "bits" in table or "words" in table else ["20"])
    for key, value in {"query": words[0], "low": "1", "high": "50"}.items():
        if isinstance(table.get(key), str):
            yield table[key], (reply, value)
    for inner in table.values():
        if isinstance(inner, dict):
            yield from _forms(inner)
