"""The record's file: SQLite, opened by one service at a time, checked before anything is trusted to it."""

import contextlib
import fcntl
import os
import sqlite3
from collections.abc import Generator
from pathlib import Path
from typing import Final

__all__ = ["LAYOUT_VERSION", "RecordError", "RecordLostError", "Store"]

APPLICATION: Final = 0x716D696C
"""Marks a SQLite file as a record of ours ("qmil")."""
LAYOUT_VERSION: Final = 1
WAIT_SECONDS: Final = 0.5
"""How long a transaction waits for a reader that holds the file."""

LAYOUT: Final = """
CREATE TABLE identity (name TEXT PRIMARY KEY, value TEXT NOT NULL) WITHOUT ROWID;
CREATE TABLE journal (number INTEGER PRIMARY KEY, kind INTEGER NOT NULL, body BLOB NOT NULL, checksum INTEGER NOT NULL);
CREATE TABLE progress (only INTEGER PRIMARY KEY CHECK (only = 1), judged INTEGER NOT NULL);
CREATE TABLE snapshot (number INTEGER PRIMARY KEY, body BLOB NOT NULL, checksum INTEGER NOT NULL);
CREATE TABLE outbox (
    number INTEGER PRIMARY KEY AUTOINCREMENT,
    topic TEXT NOT NULL, payload BLOB NOT NULL, retain INTEGER NOT NULL, content_type TEXT
);
INSERT INTO progress VALUES (1, 0);
"""


class RecordError(Exception):
    """The record cannot be used, for a reason that its user can mend."""


class RecordLostError(Exception):
    """The record's file is no longer where it was: what is written goes nowhere, so the service must stop."""


class Store:
    """The file under a record, with a lock beside it that one service holds.

    Readers get in beside the service. Raises `RecordError` when the file is newer, damaged, of another plant,
    read-only or held.
    """

    def __init__(self, path: Path, plant: dict[str, str]) -> None:
        self.path = path
        self._lock = self._locked(path.with_name(path.name + ".lock"))
        try:
            self.db = sqlite3.connect(path, timeout=WAIT_SECONDS, isolation_level=None)
            try:
                self._prepare(plant)
            except BaseException:
                self.db.close()
                raise
        except sqlite3.Error as error:
            self._unlock()
            raise RecordError(f"record {path}: {in_words(error)}") from None
        except BaseException:
            self._unlock()
            raise
        self._file = self._inode()

    def _locked(self, path: Path) -> int:
        try:
            lock = os.open(path, os.O_RDWR | os.O_CREAT, 0o644)
        except OSError as error:
            raise RecordError(f"record {self.path}: its lock {path} cannot be opened: {error.strerror}") from None
        try:
            fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            os.close(lock)
            raise RecordError(
                f"record {self.path}: another running service holds it; stop that one, or name another record"
            ) from None
        return lock

    def _unlock(self) -> None:
        os.close(self._lock)

    def _prepare(self, plant: dict[str, str]) -> None:
        db = self.db
        application, version = self._pragma("application_id"), self._pragma("user_version")
        tables = db.execute("SELECT count(*) FROM sqlite_master").fetchone()[0]
        if application != APPLICATION and tables:
            raise RecordError(f"record {self.path}: is a database of something else; name another file")
        if tables and version != LAYOUT_VERSION:
            writer = "an older" if version < LAYOUT_VERSION else "a newer"
            raise RecordError(
                f"record {self.path}: was written by {writer} quietmill, in layout {version} and not {LAYOUT_VERSION}"
            )
        db.execute("PRAGMA journal_mode=WAL")
        db.execute("PRAGMA synchronous=FULL")
        if not tables:
            db.executescript(
                f"BEGIN;{LAYOUT}PRAGMA application_id={APPLICATION};PRAGMA user_version={LAYOUT_VERSION};COMMIT;"
            )
            with self.transaction(checked=False):
                db.executemany("INSERT INTO identity VALUES (?, ?)", plant.items())
        found = dict(db.execute("SELECT name, value FROM identity"))
        for name, value in plant.items():
            if found.get(name) != value:
                raise RecordError(
                    f"record {self.path}: belongs to the plant whose {name} is {found.get(name)!r}, the settings say "
                    f"{value!r}; name another file"
                )
        with self.transaction(checked=False):  # can it be written?
            db.execute("UPDATE progress SET judged = judged")
        damage = db.execute("PRAGMA quick_check(1)").fetchone()[0]
        if damage != "ok":
            raise RecordError(f"record {self.path}: is damaged ({damage}); move it away to start afresh")

    def _pragma(self, name: str) -> int:
        return int(self.db.execute(f"PRAGMA {name}").fetchone()[0])

    def _inode(self) -> tuple[int, int] | None:
        with contextlib.suppress(OSError):
            status = self.path.stat()
            return status.st_dev, status.st_ino
        return None

    @contextlib.contextmanager
    def transaction(self, checked: bool = True) -> Generator[sqlite3.Connection]:
        """Commit all that is done within, or nothing. Raises `RecordLostError` when it went into a deleted file.

        SQLite commits into a file that was deleted or replaced without a word.
        """
        self.db.execute("BEGIN IMMEDIATE")
        try:
            yield self.db
            self.db.execute("COMMIT")
        except BaseException:
            if self.db.in_transaction:  # a full disk has rolled back already
                self.db.execute("ROLLBACK")
            raise
        if checked and self._inode() != self._file:
            raise RecordLostError(f"record {self.path} was deleted or replaced while the service ran")

    @property
    def bytes(self) -> int:
        """The size of the file with its write-ahead log."""
        total = 0
        for path in (self.path, self.path.with_name(self.path.name + "-wal")):
            with contextlib.suppress(OSError):
                total += path.stat().st_size
        return total

    def close(self) -> None:
        """Let go of the file and its lock."""
        self.db.close()
        self._unlock()


def in_words(error: sqlite3.Error) -> str:
    """Say what is wrong with a file."""
    name = getattr(error, "sqlite_errorname", "") or ""
    if name.startswith("SQLITE_NOTADB"):
        return "is no SQLite file; name another one, or move it away"
    if name.startswith("SQLITE_CORRUPT"):
        return "is damaged; move it away to start afresh"
    if name.startswith(("SQLITE_READONLY", "SQLITE_PERM")):
        return "cannot be written: it, or its folder, is read-only for this user"
    if name.startswith("SQLITE_CANTOPEN"):
        return "cannot be opened: does its folder exist, may this user write there?"
    if name.startswith("SQLITE_FULL"):
        return "cannot be written: the disk is full"
    if name.startswith(("SQLITE_BUSY", "SQLITE_LOCKED")):
        return "cannot be written: another program holds the file"
    return f"cannot be used ({error})"
