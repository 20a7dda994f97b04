"""Whatever is asked of a running daemon is answered as its OpenAPI document says, and leaves it usable."""

from __future__ import annotations

import json
import logging
from collections import Counter
from contextlib import suppress
from pathlib import Path
from random import Random
from typing import Any

import pytest
import requests
import schemathesis
from hypothesis import strategies as st
from schemathesis import Case, GenerationMode

from tests import traps
from tests.api.conftest import bearer
from tests.api.routes import ROUTES, Route
from tests.fuzz.box import fuzz
from tests.running import RunningTrap, hurried, running_trap
from trapd.errors import Refused
from trapd.record import verify

RANK = ["read", "operate", "administer"]
LONGEST_S = 10.0
DELIBERATE = {"instrument_unreachable", "record_unwritable"}
"""Codes of a 503. The rack of this test has no faults, but it may be busy."""

RANGES = {
    "drive.frequency": (20.9e6, 21.1e6),
    "drive.amplitude": (0.0, 420.0),
    "endcaps": (0.0, 900.0),
    "rods": (-10.0, 10.0),
    "shim_x": (-20.0, 20.0),
}
HUGE = [2**63 - 1, 2**63, 10**30, "9" * 5000, -1]
KNOWN = {
    "ions": {"40Ca+": 1},
    "incoming": ["40Ca+"],
    "species": "40Ca+",
    "point": "work",
    "scan": "x",
    "setpoint": "endcaps",
    "schedule": "x",
    "mode": "x",
    "kind": "finding",
    "presence": "held",
}
"""What no fuzzer guesses: names of this trap."""


def knowing(given: Any, random: Random) -> Any:
    """The same body or query with names and numbers of this trap in some of its places."""
    if not isinstance(given, dict) or random.random() < 0.3:
        return given
    known: dict[str, Any] = {name: value for name, value in KNOWN.items() if name in given and random.random() < 0.6}
    for key in given:
        if key in ("values", "from"):
            names = random.sample(sorted(RANGES), random.randint(1, len(RANGES)))
            known[key] = {name: random.uniform(*RANGES[name]) for name in names}
        if key in ("after", "at", "seq"):
            known[key] = random.choice([random.randint(0, 300), *HUGE])
    return {**given, **known}


def said(answer: requests.Response) -> Any:
    """The JSON of an answer, strictly: NaN and Infinity are none."""

    def refuse(word: str) -> None:
        raise AssertionError(f"{word} is no JSON")

    assert answer.headers["Content-Type"] == "application/json"
    return json.loads(answer.content.decode("utf-8"), parse_constant=refuse)


def assert_documented(case: Case[Any], answer: requests.Response) -> None:
    described = case.operation.definition.raw["responses"]
    status = str(answer.status_code)
    elsewhere = answer.status_code in (404, 405)  # a path parameter with a slash or nothing in it is another path
    assert status in described or (status[0] == "5" and "5XX" in described) or elsewhere, answer.text
    if answer.ok:
        if answer.headers["Content-Type"].startswith("text/event-stream"):
            assert case.path == "/v1/stream"
            assert next(answer.iter_lines()).startswith(b"id: ")
        else:
            said(answer)
        return
    problem = said(answer)
    assert set(problem) == {"code", "message", "details"}, problem
    assert isinstance(problem["code"], str)
    assert isinstance(problem["message"], str)
    assert problem["message"]
    assert isinstance(problem["details"], dict)
    assert answer.status_code < 500 or (answer.status_code == 503 and problem["code"] in DELIBERATE), problem


def assert_permitted(route: Route, role: str | None, status: int) -> None:
    if route.role is None:
        assert status not in (401, 403)
    elif role is None:
        assert status == 401
    elif RANK.index(role) < RANK.index(route.role):
        assert status in (403, 404, 405, 422)  # a body that is no JSON is told so before anybody asks for the role
    else:
        assert status not in (401, 403)


class Asker:
    """Sends what was drawn over TCP with one token of each role, or none, and looks at each answer."""

    def __init__(self, trap: RunningTrap, http: requests.Session, caplog: pytest.LogCaptureFixture) -> None:
        self.statuses: Counter[int] = Counter()
        self._trap, self._http, self._caplog = trap, http, caplog
        self._tokens = {role: trap.client.new_token(f"a-{role}-token", role)["token"] for role in RANK}

    def strategy(self) -> st.SearchStrategy[tuple[Route, Case[Any]]]:
        """Of every route: requests that its description allows, and others."""
        document = self._http.get(f"{self._trap.url}/v1/openapi.json", timeout=LONGEST_S).json()
        schema = schemathesis.openapi.from_dict(document)
        kinds: list[st.SearchStrategy[tuple[Route, Case[Any]]]] = [
            st.tuples(st.just(route), schema[route.path][route.method].as_strategy(generation_mode=mode))
            for route in ROUTES
            for mode in (GenerationMode.POSITIVE, GenerationMode.NEGATIVE)
        ]
        return st.one_of(kinds)

    def ask(self, drawn: tuple[Route, Case[Any]], role: str | None, seed: int) -> None:
        (route, case), random = drawn, Random(seed)
        case.body, case.query = knowing(case.body, random), knowing(case.query, random)
        case.path_parameters = knowing(case.path_parameters, random)
        if random.random() < 0.05:
            on_again(self._trap)
        answer = self._answer(case, role)
        if answer is None:
            return
        self.statuses[answer.status_code] += 1
        try:
            with answer:
                assert_documented(case, answer)
            assert_permitted(route, role, answer.status_code)
            assert_quiet(self._caplog)
        except Exception as error:
            error.add_note(f"with the token of {role}: {case.as_curl_command()}\nwas answered {answer.status_code}")
            raise

    def _answer(self, case: Case[Any], role: str | None) -> requests.Response | None:
        """None for what cannot be sent: a header that is no text, a number that is no JSON."""
        sent = case.as_transport_kwargs(base_url=self._trap.url)
        if role is not None:
            sent["headers"] = {**sent["headers"], **bearer(self._tokens[role])}
        try:
            return self._http.request(**sent, timeout=LONGEST_S, stream=True)
        except (requests.exceptions.InvalidHeader, requests.exceptions.InvalidJSONError, UnicodeError):
            return None


@pytest.mark.long
def test_every_answer_is_documented_and_the_daemon_survives_them_all(
    tmp_path: Path, caplog: pytest.LogCaptureFixture
) -> None:
    with running_trap(tmp_path, hurried(traps.NORTH_BENCH + traps.SCANS)) as trap, requests.Session() as http:
        http.trust_env = False
        trap.switch_on()
        asker = Asker(trap, http, caplog)
        roles = st.sampled_from(["operate", "administer", "operate", "administer", "read", None])
        count = fuzz(0.45, asker.ask, asker.strategy(), roles, st.integers(0, 2**32), least=100)
        print(f"{count} requests: {dict(asker.statuses)}; {trap.client.status()['record']['last_seq']} entries")
        assert {200, 202, 401, 403, 404, 409, 422} <= asker.statuses.keys()
        assert_usable(trap)
        assert_quiet(caplog)


def on_again(trap: RunningTrap) -> None:
    """Most of what is fuzzed switches off, claims or empties the trap; what comes later should find it working."""
    for step in (
        lambda: trap.client.release(interrupt=True),
        lambda: trap.client.ions("none", why="fuzzing", interrupt=True),
        lambda: trap.client.on(why="fuzzing", interrupt=True, wait=False),
    ):
        with suppress(Refused):
            step()


def assert_quiet(caplog: pytest.LogCaptureFixture) -> None:
    loud = [one for one in caplog.records if one.exc_info or one.levelno >= logging.ERROR]
    assert not loud, [one.getMessage() for one in loud]


def assert_usable(trap: RunningTrap) -> None:
    trap.client.off(why="the end of a test")
    situation = trap.client.status()["situation"]
    assert set(situation["outputs"].values()) == {False}
    assert situation["unreachable"] == {} or situation["unreachable"] == []
    report = verify(trap.record_path)
    assert report.ok, report.problems
    assert trap.client.verify()["ok"]
