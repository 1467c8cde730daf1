from __future__ import annotations

import os
import sqlite3
from pathlib import Path

import pytest

from layerscan.errors import InputError, LayerscanError
from layerscan.study import ledger as ledgers
from layerscan.study.ledger import FILE_NAME, Ledger, TaskRecord, UnitRow, dump


def make_task(key: str = "k", **changes) -> TaskRecord:
    values = {
        "key": key,
        "kind": "measure",
        "unit": "u",
        "state": "done",
        "settings": {"page": 0},
        "versions": {"layerscan": "1"},
        "document": {"period_nm": None, "x": [1.5, float("nan")]},
        "picture": b"\xff\xd8",
        "layers": ((0, "dark", 100.0, 1.0, None, 1, ""), (1, "bright", 50.0, None, 0.5, 0, "not_resolved")),
    }
    return TaskRecord(**{**values, **changes})


def test_a_task_comes_back_as_it_was_stored_and_nan_is_null(tmp_path):
    # a ledger must not change what it keeps; JSON knows no NaN, unknown is null
    with Ledger(tmp_path, write=True) as ledger:
        ledger.record([make_task()])
    with Ledger(tmp_path) as ledger:
        task = ledger.task("k")
        assert task.document == {"period_nm": None, "x": [1.5, None]}
        assert (task.settings, task.picture, task.state) == ({"page": 0}, b"\xff\xd8", "done")
        assert [row[1] for row in ledger.layers("k")] == ["dark", "bright"]
        assert ledger.task("other") is None


def test_storing_a_task_twice_changes_nothing(tmp_path):
    # some tasks are committed but not acknowledged before a kill: writes must be idempotent
    with Ledger(tmp_path, write=True) as ledger:
        ledger.record([make_task(), make_task("l")])
        before = ledger.content()
        ledger.record([make_task()])
        assert ledger.content() == before
        ledger.record([make_task(layers=())])
        assert len(ledger.content()) == len(before) - 2


def test_the_file_is_in_wal_mode_with_full_synchronisation(tmp_path):
    # SQLite documentation, PRAGMA synchronous: FULL is 2
    with Ledger(tmp_path, write=True) as ledger:
        assert ledger._connection.execute("PRAGMA journal_mode").fetchone() == ("wal",)
        assert ledger._connection.execute("PRAGMA synchronous").fetchone() == (2,)
        assert ledger.check_integrity() == []


def test_a_second_writer_is_refused_and_readers_are_not(tmp_path):
    # single writer
    with Ledger(tmp_path, write=True) as ledger:
        ledger.record([make_task()])
        with pytest.raises(InputError, match="is being run by another process"):
            Ledger(tmp_path, write=True)
        with Ledger(tmp_path) as reader:
            assert reader.task("k") is not None
    with Ledger(tmp_path, write=True):
        pass


def test_a_newer_ledger_is_refused_and_left_as_it_is(tmp_path):
    # issue: "a ledger of a newer version"
    Ledger(tmp_path, write=True).close()
    connection = sqlite3.connect(tmp_path / FILE_NAME)
    connection.execute("PRAGMA user_version = 999")
    connection.close()
    before = (tmp_path / FILE_NAME).read_bytes()
    for write in (True, False):
        with pytest.raises(InputError, match="has version 999; this layerscan knows up to 1"):
            Ledger(tmp_path, write=write)
    assert (tmp_path / FILE_NAME).read_bytes() == before


def test_an_older_ledger_is_migrated_by_the_next_run_with_its_results(tmp_path, monkeypatch):
    # a made-up next version: one column more
    with Ledger(tmp_path, write=True) as ledger:
        ledger.record([make_task()])
    monkeypatch.setattr(ledgers, "SCHEMA_VERSION", 2)
    monkeypatch.setattr(ledgers, "_MIGRATIONS", {1: ("ALTER TABLE tasks ADD COLUMN later TEXT",)})
    with pytest.raises(InputError, match="older version 1"):
        Ledger(tmp_path)
    with Ledger(tmp_path, write=True) as ledger:
        assert ledger.task("k").state == "done"
        assert ledger._connection.execute("PRAGMA user_version").fetchone() == (2,)
        assert ledger._connection.execute("SELECT later FROM tasks").fetchall() == [(None,)]


def test_a_full_disk_loses_nothing_and_says_what_to_do(tmp_path):
    # simulated by SQLite itself: PRAGMA max_page_count gives "database or disk is full"
    with Ledger(tmp_path, write=True) as ledger:
        ledger.record([make_task()])
        pages = ledger._connection.execute("PRAGMA page_count").fetchone()[0]
        ledger._connection.execute(f"PRAGMA max_page_count = {pages + 2}")
        with pytest.raises(LayerscanError, match=r"disk .* is full.*run the same\s+command again"):
            ledger.record([make_task("big", picture=os.urandom(1 << 20))])
        assert ledger.task("big") is None
        ledger._connection.execute("PRAGMA max_page_count = 100000")
        ledger.record([make_task("big", picture=os.urandom(1 << 20))])
    with Ledger(tmp_path) as ledger:
        assert ledger.task("k") is not None
        assert ledger.check_integrity() == []


def test_a_folder_that_cannot_be_written_is_refused(tmp_path, monkeypatch):
    # issue: "unwritable folder"; as root permissions do not bind, so a file stands in the way and an error is simulated
    (tmp_path / "file").write_text("")
    with pytest.raises(InputError, match="cannot be written to"):
        Ledger(tmp_path / "file", write=True)

    def refuse(self: Path, data: bytes) -> int:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "write_bytes", refuse)
    with pytest.raises(InputError, match=r"cannot be written to \(Permission denied\)"):
        Ledger(tmp_path / "new", write=True)


def test_no_ledger_and_a_damaged_one_are_told_apart(tmp_path):
    # bad input
    with pytest.raises(InputError, match=r"holds no study\.sqlite"):
        Ledger(tmp_path)
    (tmp_path / FILE_NAME).write_bytes(b"this is no database, it is only text" * 100)
    with pytest.raises(InputError, match="is damaged or no ledger"):
        Ledger(tmp_path)


def test_failures_by_chance_or_of_another_version_are_tried_again(tmp_path):
    # what was refused for good is not computed again by the same version
    tasks = [
        make_task("final", state="failed", by_chance=False),
        make_task("chance", state="failed", by_chance=True),
        make_task("older", state="failed", by_chance=False, versions={"layerscan": "0"}),
        make_task("done"),
    ]
    with Ledger(tmp_path, write=True) as ledger:
        ledger.record(tasks)
        assert ledger.failures_to_retry("1") == {"chance", "older"}


def test_the_plan_is_replaced_as_a_whole(tmp_path):
    # units of a former plan must not stay
    with Ledger(tmp_path, write=True) as ledger:
        ledger.write_plan({"a": 1}, [UnitRow(key=k, kind="image", row={"path": k}) for k in "xyz"])
        ledger.write_plan(
            {"a": 2}, [UnitRow(key=k, kind="image", row={"path": k}, tasks={"measure": "m"}) for k in "zx"]
        )
        assert [unit.key for unit in ledger.units()] == ["z", "x"]
        assert ledger.facts() == {"a": 2}


def test_json_is_the_same_for_the_same_values_in_any_order():
    # task keys hash this text
    assert dump({"b": (1, 2), "a": float("inf")}) == dump({"a": None, "b": [1, 2]}) == '{"a":null,"b":[1,2]}'
