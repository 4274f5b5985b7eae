"""The record of a service, and the order in which a batch passes through it.

1. decode: messages become readings.
2. journal: the batch is one packed entry, committed with what earlier batches left to write (`commit_batch`).
3. acknowledge: only now may the broker forget the messages.
4. judge: the arrays move.
5. outbox: what the batch says is committed with the number of the entry judged (`commit_judged`); a batch that says
   nothing leaves its number to the next one's step 2.
6. publish, in order, and
7. mark: what the broker has acknowledged leaves the outbox with the next commit.

A snapshot is committed with step 5, never before it. On recovery the arrays of the last snapshot are taken, entries up
to the last one judged rebuild them and say nothing; those behind it are judged and speak.
"""

import contextlib
import sqlite3
from collections.abc import Generator, Iterator, Sequence
from pathlib import Path
from typing import Final

from quietmill.record.entries import READINGS, SETTINGS, Entry, ReadingsEntry, Snapshot, checksum, pack, unpack
from quietmill.record.store import RecordError, RecordLostError, Store, in_words

__all__ = ["Letter", "Posted", "Record", "RecordBusyError", "RecordError", "RecordLostError"]

SNAPSHOTS_KEPT: Final = 2


class RecordBusyError(Exception):
    """A commit failed for a reason that may pass (disk full, file held); the batch is kept and tried again."""


Letter = tuple[str, bytes, bool, str | None]
"""A message in the outbox: topic, payload, whether it is retained, content type."""
Posted = tuple[str, bytes, bool, str | None, int]
"""The same with its number, which is its place in the order."""


class Record:
    """The durable memory of one service. Raises `RecordError` when the file cannot be used."""

    def __init__(self, path: Path, plant: dict[str, str]) -> None:
        self._store = Store(path, plant)
        self._db = self._store.db
        self._delivered: list[int] = []
        last = self._db.execute("SELECT max(number) FROM journal").fetchone()[0] or 0
        newest = self._db.execute("SELECT max(number) FROM snapshot").fetchone()[0] or 0
        self.judged: int = self._db.execute("SELECT judged FROM progress").fetchone()[0]
        self.number: int = max(last, newest, self.judged)
        """Of the last entry in the journal."""

    @contextlib.contextmanager
    def _writing(self) -> Generator[sqlite3.Connection]:
        """Commit, together with how far was judged and what was delivered; or change nothing."""
        delivered = list(self._delivered)
        try:
            with self._store.transaction() as db:
                db.execute("UPDATE progress SET judged = ?", (self.judged,))
                db.executemany("DELETE FROM outbox WHERE number = ?", [(number,) for number in delivered])
                yield db
        except sqlite3.Error as error:
            raise RecordBusyError(in_words(error)) from None
        del self._delivered[: len(delivered)]

    def snapshot(self) -> tuple[int, Snapshot] | None:
        """Return the newest snapshot with its place in the journal, or None in a fresh record.

        Raises `RecordError` when it is damaged and no older one is left.
        """
        damaged = 0
        for number, body, check in self._db.execute("SELECT * FROM snapshot ORDER BY number DESC"):
            if checksum(number, body) == check:
                return number, unpack(body, Snapshot)
            damaged += 1
        if damaged or self.number:
            raise RecordError(f"record {self._store.path}: its snapshots are damaged; move it away to start afresh")
        return None

    def entries(self, behind: int) -> Iterator[Entry]:
        """Yield the journal's entries behind a place. Raises `RecordError` at a damaged or missing one."""
        expected = behind
        for number, kind, body, check in self._db.execute(
            "SELECT number, kind, body, checksum FROM journal WHERE number > ? ORDER BY number", (behind,)
        ):
            expected += 1
            if number != expected or checksum(number, body) != check:
                raise RecordError(
                    f"record {self._store.path}: journal entry {expected} is damaged; move it away to start afresh"
                )
            yield Entry(number, kind, body)

    def letters(self) -> list[Posted]:
        """Return what waits in the outbox, in order."""
        rows = self._db.execute("SELECT topic, payload, retain, content_type, number FROM outbox ORDER BY number")
        return [(topic, payload, bool(retain), kind, number) for topic, payload, retain, kind, number in rows]

    def delivered(self, number: int) -> None:
        """Note that the broker has a letter; it leaves the outbox with the next commit."""
        self._delivered.append(number)

    def commit_batch(self, entry: ReadingsEntry) -> int:
        """Journal a batch; return its number. Raises `RecordBusyError`, and then nothing has changed."""
        number, body = self.number + 1, pack(entry)
        with self._writing() as db:
            db.execute("INSERT INTO journal VALUES (?, ?, ?, ?)", (number, READINGS, body, checksum(number, body)))
        self.number = number
        return number

    def commit_judged(self, number: int, letters: Sequence[Letter], snapshot: Snapshot | None = None) -> list[Posted]:
        """Commit what the entries up to `number` say, and a snapshot of the arrays after them; return the letters.

        A snapshot drops the journal behind the one before it. Raises `RecordBusyError`.
        """
        before, self.judged = self.judged, number
        try:
            with self._writing() as db:
                kept = post(db, letters)
                if snapshot is not None:
                    keep(db, number, snapshot)
        except BaseException:
            self.judged = before
            raise
        return kept

    def commit_settings(self, text: bytes, letters: Sequence[Letter], snapshot: Snapshot) -> list[Posted]:
        """Journal a change of settings with what it says and the arrays after it, all at once; return the letters."""
        number = self.number + 1
        before, self.judged = self.judged, number
        try:
            with self._writing() as db:
                db.execute("INSERT INTO journal VALUES (?, ?, ?, ?)", (number, SETTINGS, text, checksum(number, text)))
                kept = post(db, letters)
                keep(db, number, snapshot)
        except BaseException:
            self.judged = before
            raise
        self.number = number
        return kept

    def take_leave(self) -> None:
        """Commit what is left to write, at a stop in good order."""
        with self._writing():
            pass

    @property
    def bytes(self) -> int:
        """How large the record is."""
        return self._store.bytes

    def close(self) -> None:
        """Let go of the file."""
        self._store.close()


def post(db: sqlite3.Connection, letters: Sequence[Letter]) -> list[Posted]:
    """Put letters into the outbox; return them with their numbers."""
    numbers = [db.execute("INSERT INTO outbox VALUES (NULL, ?, ?, ?, ?)", letter).lastrowid for letter in letters]
    return [(*letter, number or 0) for number, letter in zip(numbers, letters, strict=True)]


def keep(db: sqlite3.Connection, number: int, snapshot: Snapshot) -> None:
    """Keep a snapshot, and drop the journal that no kept one needs."""
    body = pack(snapshot)
    db.execute("INSERT OR REPLACE INTO snapshot VALUES (?, ?, ?)", (number, body, checksum(number, body)))
    db.execute(
        "DELETE FROM snapshot WHERE number NOT IN (SELECT number FROM snapshot ORDER BY number DESC LIMIT ?)",
        (SNAPSHOTS_KEPT,),
    )
    db.execute("DELETE FROM journal WHERE number <= (SELECT min(number) FROM snapshot)")
