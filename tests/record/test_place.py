"""A record that is no longer where it was opened takes no entry: nobody would ever find it."""

from __future__ import annotations

from pathlib import Path

import pytest

from tests.record.samples import intent, note
from trapd.errors import RecordUnwritable
from trapd.record import Record, verify
from trapd.record.file import _place


@pytest.mark.parametrize("how", ["renamed", "deleted", "replaced"])
def test_a_file_moved_away_fails_appends_until_it_is_back(record: Record, path: Path, how: str) -> None:
    record.append(note()).result()
    away = path.with_name("away.sqlite")
    path.rename(away)
    if how == "replaced":
        path.write_bytes(away.read_bytes())
    elif how == "deleted":
        away.with_name("kept").hardlink_to(away)
        away.unlink()
        away = away.with_name("kept")
    for _ in range(2):
        with pytest.raises(RecordUnwritable, match="moved away, deleted or replaced"):
            record.append(note()).result()
    away.replace(path)
    assert record.append(note()).result()[0].seq == 2
    assert verify(path).entries == 2


def test_a_log_removed_in_use_is_noticed_and_what_it_held_is_kept(record: Record, path: Path) -> None:
    record.append(note(), intent()).result()
    path.with_name(path.name + "-wal").unlink()
    for _ in range(2):
        with pytest.raises(RecordUnwritable, match=r"-wal was removed"):
            record.append(note()).result()
    record.close()
    assert verify(path).entries == 2


def test_a_log_replaced_in_use_is_noticed(record: Record, path: Path) -> None:
    record.append(note()).result()
    log = path.with_name(path.name + "-wal")
    copy = log.with_name("copy")
    copy.write_bytes(log.read_bytes())
    copy.replace(log)
    with pytest.raises(RecordUnwritable, match=r"-wal was removed"):
        record.append(note()).result()
    record.close()


def test_a_log_is_watched_on_a_system_that_does_not_name_open_files(
    record: Record, path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("trapd.record.file._DESCRIPTORS", str(path.with_name("no-such-folder")))
    record.append(note()).result()
    path.with_name(path.name + "-wal").unlink()
    with pytest.raises(RecordUnwritable, match=r"-wal was removed"):
        record.append(note()).result()
    record.close()
    assert verify(path).entries == 1


def test_no_look_at_the_log_makes_the_disk_store_its_times_with_each_commit(
    record: Record, path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    record.append(note()).result()
    looked_at: list[str] = []

    def place(name: str) -> tuple[int, int] | None:
        looked_at.append(name)
        return _place(name)

    monkeypatch.setattr("trapd.record.file._place", place)
    record.append(note()).result()
    assert looked_at == [str(path)]
