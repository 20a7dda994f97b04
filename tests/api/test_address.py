"""How a client finds the daemon."""

from __future__ import annotations

import os
import socket
import stat
import warnings
from collections.abc import Iterator
from contextlib import ExitStack
from pathlib import Path

import pytest

from trapd import address
from trapd.address import find, runtime_socket
from trapd.errors import ConfigError, DaemonUnreachable, NotPermitted


@pytest.fixture(autouse=True)
def directories(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> tuple[Path, Path]:
    monkeypatch.delenv("TRAPD_AT", raising=False)
    monkeypatch.setenv("XDG_RUNTIME_DIR", str(tmp_path / "run"))
    monkeypatch.setattr(address, "SYSTEM_DIRECTORY", tmp_path / "system")
    places = (tmp_path / "run" / "trapd", tmp_path / "system")
    (tmp_path / "run").mkdir(mode=0o700)
    for place in places:
        place.mkdir()
    return places


@pytest.fixture
def live() -> Iterator[ExitStack]:
    with ExitStack() as stack:
        yield stack


def listen(live: ExitStack, path: Path) -> None:
    listener = live.enter_context(socket.socket(socket.AF_UNIX))
    listener.bind(str(path))
    listener.listen()


@pytest.mark.parametrize(
    ("name", "file"),
    [("north bench", "north-bench.sock"), ("  Zähler/../2 ", "z-hler-2.sock"), ("a", "a.sock")],
)
def test_the_socket_has_the_name_of_the_trap(directories: tuple[Path, Path], name: str, file: str) -> None:
    assert runtime_socket(name) == directories[0] / file


def test_any_name_has_a_short_socket_of_its_own() -> None:
    names = ["x" * 300, "x" * 301, "阱", "☢", ""]
    files = [runtime_socket(name).name for name in names]
    assert len(set(files)) == len(names)
    assert all(len(file) < 60 for file in files)


def test_the_only_one_that_answers_is_found(directories: tuple[Path, Path], live: ExitStack) -> None:
    with socket.socket(socket.AF_UNIX) as dead:
        dead.bind(str(directories[0] / "dead.sock"))
    (directories[0] / "file.sock").write_text("no socket")
    listen(live, directories[1] / "live.sock")
    assert find().socket_path == directories[1] / "live.sock"


def test_none_says_what_was_looked_for_and_how_to_name_one(directories: tuple[Path, Path]) -> None:
    with pytest.raises(DaemonUnreachable) as caught:
        find()
    for part in (f"{directories[0]}/*.sock", f"{directories[1]}/*.sock", "trapd serve", "TRAPD_AT"):
        assert part in caught.value.message


def test_several_are_named(directories: tuple[Path, Path], live: ExitStack) -> None:
    listen(live, directories[0] / "one.sock")
    listen(live, directories[0] / "two.sock")
    with pytest.raises(DaemonUnreachable, match=r"one\.sock.*two\.sock.*TRAPD_AT"):
        find()


@pytest.mark.parametrize("url", ["http://127.0.0.1:8417", "https://bench.example/"])
def test_a_url_is_taken_as_it_is(url: str) -> None:
    assert find(url) == address.Address(url=url.rstrip("/"))


def test_the_argument_goes_before_the_environment(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("TRAPD_AT", "/named/by.sock")
    assert find().socket_path == Path("/named/by.sock")
    assert find("/other.sock").socket_path == Path("/other.sock")


def test_a_trap_file_leads_to_the_socket_of_its_trap(
    directories: tuple[Path, Path], live: ExitStack, tmp_path: Path
) -> None:
    file = tmp_path / "trap.toml"
    file.write_text('[trap]\nname = "north bench"\n')
    with pytest.raises(DaemonUnreachable, match=r"north-bench\.sock.*trapd serve"):
        find(file)
    listen(live, directories[1] / "north-bench.sock")
    assert find(file).socket_path == directories[1] / "north-bench.sock"


def test_a_trap_file_may_name_its_socket(tmp_path: Path) -> None:
    file = tmp_path / "trap.toml"
    file.write_text('[trap]\nname = "x"\n[server]\nsocket = "here.sock"\n')
    assert find(file).socket_path == tmp_path / "here.sock"


@pytest.mark.parametrize("text", [None, "", "trap = 1", "[trap]\n", "no toml", "\x00"])
def test_what_is_no_trap_file_is_told(tmp_path: Path, text: str | None) -> None:
    file = tmp_path / "trap.toml"
    if text is not None:
        file.write_text(text)
    with pytest.raises(ConfigError, match=r"trap\.toml"):
        find(file)


def test_without_a_runtime_directory_of_the_session_nothing_is_said(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.delenv("XDG_RUNTIME_DIR")
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        with pytest.raises(DaemonUnreachable):
            find()


def test_the_daemon_s_directory_is_made_for_its_user_alone(directories: tuple[Path, Path]) -> None:
    directories[0].rmdir()
    runtime_socket("x")
    assert stat.S_IMODE(directories[0].stat().st_mode) == 0o700


def test_a_directory_of_somebody_else_is_refused(
    directories: tuple[Path, Path], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    if os.geteuid() == 0:
        os.chown(directories[0], 4242, 4242)
    else:
        monkeypatch.setattr(os, "geteuid", lambda: 4242)
    for ask in (find, lambda: runtime_socket("x")):
        with pytest.raises(NotPermitted, match=r"expected a directory of user .* set XDG_RUNTIME_DIR"):
            ask()
