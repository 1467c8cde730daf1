"""The ledger of a study: one SQLite file with every result, its settings, versions, hashes, times and failures.

Written by one process only, in WAL mode with full synchronisation: what ``record`` returned from survives a power cut.
Every result is stored under its task key (what was done, to which bytes, with which settings), so storing it twice
changes nothing and a changed file or setting never meets an old result.
"""

from __future__ import annotations

import contextlib
import json
import os
import sqlite3
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from types import TracebackType
from typing import Any

from layerscan.errors import InputError, LayerscanError

SCHEMA_VERSION = 1
FILE_NAME = "study.sqlite"

_CREATE_TABLES = """
CREATE TABLE facts (name TEXT PRIMARY KEY, value TEXT NOT NULL);
CREATE TABLE files (path TEXT PRIMARY KEY, size INTEGER, mtime_ns INTEGER, ctime_ns INTEGER, sha256 TEXT NOT NULL);
CREATE TABLE units (
    position INTEGER PRIMARY KEY, key TEXT NOT NULL UNIQUE, kind TEXT NOT NULL, row TEXT NOT NULL, tasks TEXT NOT NULL);
CREATE TABLE tasks (
    key TEXT PRIMARY KEY, kind TEXT NOT NULL, unit TEXT NOT NULL, state TEXT NOT NULL,
    failure TEXT, reason TEXT, by_chance INTEGER NOT NULL, attempts INTEGER NOT NULL, input_sha256 TEXT,
    settings TEXT NOT NULL,
    versions TEXT NOT NULL, document TEXT, extras TEXT, picture BLOB, folder TEXT,
    seconds REAL, finished TEXT);
CREATE INDEX tasks_of_unit ON tasks (unit, kind);
CREATE TABLE layers (
    task TEXT NOT NULL, number INTEGER NOT NULL, phase TEXT NOT NULL, thickness_nm REAL NOT NULL, u_nm REAL,
    sd_lateral_nm REAL, complete INTEGER NOT NULL, flags TEXT NOT NULL, PRIMARY KEY (task, number)) WITHOUT ROWID;
"""
_CREATE = [statement for statement in _CREATE_TABLES.split(";") if statement.strip()]

_MIGRATIONS: dict[int, tuple[str, ...]] = {}
"""Statements that take a ledger from the version that is the key to the next one."""

_TASK_COLUMNS = (
    "key, kind, unit, state, failure, reason, by_chance, attempts, input_sha256, settings, versions, document, extras, "
    "picture, folder, seconds, finished"
)


@dataclass(frozen=True, kw_only=True)
class TaskRecord:
    """One task as the ledger keeps it. ``state`` is done, failed or skipped (nothing to do for it, with a reason)."""

    key: str
    kind: str
    unit: str
    state: str
    settings: Mapping[str, Any]
    versions: Mapping[str, str]
    input_sha256: str | None = None
    failure: str | None = None
    reason: str | None = None
    by_chance: bool = False
    attempts: int = 1
    document: Mapping[str, Any] | None = None
    extras: Mapping[str, Any] | None = None
    picture: bytes | None = None
    folder: str | None = None
    seconds: float | None = None
    finished: str | None = None
    layers: tuple[tuple[Any, ...], ...] = ()


@dataclass(frozen=True, kw_only=True)
class UnitRow:
    """One image or spectrum of the plan as it stood at the last run, with the keys of its tasks by name."""

    key: str
    kind: str
    row: Mapping[str, Any]
    tasks: Mapping[str, str] = field(default_factory=dict)


class Ledger:
    """A study's ledger, open for writing (one process) or for reading (any number).

    Parameters
    ----------
    folder : path
        Where ``study.sqlite`` lies.
    write : bool
        Open for writing: creates the file where there is none, and holds the study against a second writer.

    Raises
    ------
    InputError
        No ledger (reading), a ledger of a newer version, a damaged one, a folder that cannot be written to, or a
        study that another process is running.
    """

    def __init__(self, folder: str | os.PathLike[str], *, write: bool = False) -> None:
        self.folder = Path(folder)
        self.path = self.folder / FILE_NAME
        self.writable = write
        self._lock: sqlite3.Connection | None = None
        if write:
            self._prepare_folder()
            self._lock = self._take_lock()
        elif not self.path.is_file():
            raise InputError(f"'{self.folder}' holds no {FILE_NAME}. Give the folder of a study that was run.")
        try:
            self._connection = self._open(write)
        except BaseException:
            self._release_lock()
            raise

    # --- opening

    def _prepare_folder(self) -> None:
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            probe = self.folder / f".writable-{os.getpid()}"
            probe.write_bytes(b"")
            probe.unlink()
        except OSError as error:
            raise InputError(
                f"Folder '{self.folder}' cannot be written to ({error.strerror}). "
                "Give another one with --out, or make it writable."
            ) from None

    def _take_lock(self) -> sqlite3.Connection:
        """Hold a second small database in an exclusive transaction: it frees itself when the process dies."""
        lock = sqlite3.connect(self.folder / "study.lock", timeout=0, isolation_level=None)
        try:
            lock.execute("BEGIN EXCLUSIVE")
        except sqlite3.OperationalError as error:
            lock.close()
            if "locked" not in str(error):
                raise InputError(f"Study in '{self.folder}' cannot be held for writing ({error}).") from None
            raise InputError(
                f"The study in '{self.folder}' is being run by another process. Wait for it, or stop it."
            ) from None
        return lock

    def _release_lock(self) -> None:
        if self._lock is not None:
            self._lock.close()
            self._lock = None

    def _open(self, write: bool) -> sqlite3.Connection:
        connection = sqlite3.connect(self.path, isolation_level=None, timeout=30)
        try:
            version = int(connection.execute("PRAGMA user_version").fetchone()[0])
            if version > SCHEMA_VERSION:
                raise InputError(
                    f"Ledger '{self.path}' has version {version}; this layerscan knows up to {SCHEMA_VERSION}. "
                    "It was written by a newer layerscan: use that one, or another folder with --out."
                )
            if write:
                connection.execute("PRAGMA journal_mode = WAL")
                connection.execute("PRAGMA synchronous = FULL")
                self._bring_up_to_date(connection, version)
            elif version < SCHEMA_VERSION:
                raise InputError(
                    f"Ledger '{self.path}' has the older version {version}. Run the study again (what is done stays): "
                    f"that brings it to version {SCHEMA_VERSION}."
                )
        except sqlite3.DatabaseError as error:
            connection.close()
            raise self._explain(error) from None
        except BaseException:
            connection.close()
            raise
        return connection

    def _bring_up_to_date(self, connection: sqlite3.Connection, version: int) -> None:
        if version == SCHEMA_VERSION:
            return
        connection.execute("BEGIN IMMEDIATE")
        statements = [s for step in range(version, SCHEMA_VERSION) for s in _MIGRATIONS[step]] if version else _CREATE
        for statement in statements:
            connection.execute(statement)
        connection.execute(f"PRAGMA user_version = {SCHEMA_VERSION}")
        connection.execute("COMMIT")

    def _explain(self, error: sqlite3.Error) -> LayerscanError:
        text = str(error)
        if "full" in text:
            return LayerscanError(
                f"The disk of '{self.folder}' is full. What was recorded before is safe: free some space and run the "
                "same command again; only what is missing is computed."
            )
        if "not a database" in text or "malformed" in text:
            return InputError(f"'{self.path}' is damaged or no ledger ({text}). Move it away and run the study again.")
        if "readonly" in text or "unable to open" in text:
            return InputError(f"Ledger '{self.path}' cannot be opened ({text}). Make the folder writable.")
        return LayerscanError(f"Ledger '{self.path}': {text}.")

    def close(self) -> None:
        """Close the file and let the next writer in."""
        self._connection.close()
        self._release_lock()

    def __enter__(self) -> Ledger:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    # --- writing

    @contextlib.contextmanager
    def _transaction(self) -> Iterator[sqlite3.Connection]:
        try:
            self._connection.execute("BEGIN IMMEDIATE")
            yield self._connection
            self._connection.execute("COMMIT")
        except BaseException as error:
            if self._connection.in_transaction:
                with contextlib.suppress(sqlite3.Error):
                    self._connection.execute("ROLLBACK")
            if isinstance(error, sqlite3.Error):
                raise self._explain(error) from None
            raise

    def record(self, tasks: Sequence[TaskRecord]) -> None:
        """Store results; all of them or, where this raises, none. Storing the same task again replaces it.

        Raises
        ------
        LayerscanError
            The disk is full, or the file cannot be written; nothing stored before is lost.
        """
        with self._transaction() as connection:
            for task in tasks:
                connection.execute("DELETE FROM layers WHERE task = ?", (task.key,))
                connection.execute(
                    f"INSERT OR REPLACE INTO tasks ({_TASK_COLUMNS}) VALUES ({','.join('?' * 17)})",
                    (
                        task.key,
                        task.kind,
                        task.unit,
                        task.state,
                        task.failure,
                        task.reason,
                        int(task.by_chance),
                        task.attempts,
                        task.input_sha256,
                        dump(task.settings),
                        dump(task.versions),
                        None if task.document is None else dump(task.document),
                        None if task.extras is None else dump(task.extras),
                        task.picture,
                        task.folder,
                        task.seconds,
                        task.finished,
                    ),
                )
                connection.executemany(
                    "INSERT INTO layers VALUES (?,?,?,?,?,?,?,?)", [(task.key, *layer) for layer in task.layers]
                )

    def write_plan(self, facts: Mapping[str, Any], units: Iterable[UnitRow]) -> None:
        """Replace what the ledger knows of the plan: facts by name, and the units in the plan's order."""
        with self._transaction() as connection:
            connection.executemany(
                "INSERT OR REPLACE INTO facts VALUES (?, ?)", [(name, dump(value)) for name, value in facts.items()]
            )
            connection.execute("DELETE FROM units")
            connection.executemany(
                "INSERT INTO units VALUES (?,?,?,?,?)",
                ((i, unit.key, unit.kind, dump(unit.row), dump(unit.tasks)) for i, unit in enumerate(units)),
            )

    def write_facts(self, facts: Mapping[str, Any]) -> None:
        """Store facts about the study by name."""
        with self._transaction() as connection:
            connection.executemany(
                "INSERT OR REPLACE INTO facts VALUES (?, ?)", [(name, dump(value)) for name, value in facts.items()]
            )

    def remember_hashes(self, rows: Sequence[tuple[str, int, int, int, str]]) -> None:
        """Store (path, size, mtime_ns, ctime_ns, sha256) so that an untouched file is not read again."""
        with self._transaction() as connection:
            connection.executemany("INSERT OR REPLACE INTO files VALUES (?,?,?,?,?)", rows)

    # --- reading

    def _rows(self, sql: str, values: Sequence[Any] = ()) -> list[tuple[Any, ...]]:
        try:
            return self._connection.execute(sql, values).fetchall()
        except sqlite3.Error as error:
            raise self._explain(error) from None

    def known_hashes(self) -> dict[str, tuple[int, int, int, str]]:
        """Hashes by path: size, mtime_ns, ctime_ns, sha256."""
        return {row[0]: row[1:] for row in self._rows("SELECT path, size, mtime_ns, ctime_ns, sha256 FROM files")}  # type: ignore[misc]

    def facts(self) -> dict[str, Any]:
        """All facts by name."""
        return {name: json.loads(value) for name, value in self._rows("SELECT name, value FROM facts")}

    def units(self) -> list[UnitRow]:
        """The units of the last run's plan, in its order."""
        rows = self._rows("SELECT key, kind, row, tasks FROM units ORDER BY position")
        return [UnitRow(key=k, kind=kind, row=json.loads(row), tasks=json.loads(tasks)) for k, kind, row, tasks in rows]

    def states(self) -> dict[str, tuple[str, str | None]]:
        """State and folder of every task that the ledger holds, by key."""
        return {key: (state, folder) for key, state, folder in self._rows("SELECT key, state, folder FROM tasks")}

    def failures_to_retry(self, version: str) -> set[str]:
        """Keys of failures that another run may end otherwise: by chance, or met by another version of layerscan."""
        rows = self._rows("SELECT key, by_chance, versions FROM tasks WHERE state != 'done'")
        return {key for key, by_chance, made in rows if by_chance or json.loads(made).get("layerscan") != version}

    def task(self, key: str) -> TaskRecord | None:
        """One task without its layers, or None."""
        rows = self._rows(f"SELECT {_TASK_COLUMNS} FROM tasks WHERE key = ?", (key,))
        if not rows:
            return None
        values = dict(zip(_TASK_COLUMNS.split(", "), rows[0], strict=True))
        for name in ("settings", "versions", "document", "extras"):
            values[name] = json.loads(values[name]) if values[name] else None
        values["by_chance"] = bool(values["by_chance"])
        return TaskRecord(**values)

    def layers(self, key: str) -> list[tuple[Any, ...]]:
        """Layers of one measurement: number, phase, thickness_nm, u_nm, sd_lateral_nm, complete, flags."""
        names = "number, phase, thickness_nm, u_nm, sd_lateral_nm, complete, flags"
        return self._rows(f"SELECT {names} FROM layers WHERE task = ? ORDER BY number", (key,))

    def content(self) -> list[tuple[Any, ...]]:
        """Every result and layer in a fixed order, without times: equal for equal studies however they were run."""
        tasks = self._rows(
            "SELECT key, kind, unit, state, failure, reason, attempts, input_sha256, settings, document, extras, "
            "picture, folder FROM tasks ORDER BY key"
        )
        return tasks + self._rows("SELECT * FROM layers ORDER BY task, number")

    def check_integrity(self) -> list[str]:
        """What SQLite's own integrity check finds; empty where the file is sound."""
        return [row[0] for row in self._rows("PRAGMA integrity_check") if row[0] != "ok"]


def dump(value: Any) -> str:
    """JSON with sorted keys and no spaces; NaN and infinities become null."""
    return json.dumps(_without_nan(value), sort_keys=True, separators=(",", ":"), ensure_ascii=False, default=str)


def _without_nan(value: Any) -> Any:
    if isinstance(value, float):
        return value if value - value == 0 else None
    if isinstance(value, Mapping):
        return {str(k): _without_nan(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_without_nan(v) for v in value]
    return value
