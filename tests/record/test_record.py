"""The record's file: what is refused, what is kept, and what happens when it cannot be written."""

import fcntl
import os
import sqlite3
from pathlib import Path

import pytest

from quietmill.record.entries import READINGS, ReadingsEntry, Snapshot, unpack
from quietmill.record.record import Record, RecordBusyError, RecordError, RecordLostError

PLANT = {"source": "tileworks", "prefix": "quietmill"}
LETTER = ("quietmill/signals/press1.force", b"{}", False, "application/cloudevents+json")


def opened(path: Path, plant: dict[str, str] = PLANT) -> Record:
    return Record(path / "quietmill.db", plant)


def entry(number: int) -> ReadingsEntry:
    return ReadingsEntry(bytes([number]) * 72, False, {number: number}, number)


def snapshot(number: int) -> Snapshot:
    return Snapshot([], bytes([number]), b"", {}, number)


def refusal(path: Path, plant: dict[str, str] = PLANT) -> str:
    with pytest.raises(RecordError) as caught:
        opened(path, plant)
    return str(caught.value)


def test_what_was_committed_is_there_after_a_new_start(tmp_path: Path) -> None:
    record = opened(tmp_path)
    record.commit_settings(b"[]", [], snapshot(1))
    assert [record.commit_batch(entry(number)) for number in (1, 2, 3)] == [2, 3, 4]
    record.commit_judged(3, [LETTER])
    record.close()
    record = opened(tmp_path)
    assert (record.number, record.judged) == (4, 3)
    found = record.snapshot()
    assert found == (1, snapshot(1))
    assert [(row.number, row.kind, unpack(row.body, ReadingsEntry)) for row in record.entries(1)] == [
        (number + 1, READINGS, entry(number)) for number in (1, 2, 3)
    ]
    assert [letter[:4] for letter in record.letters()] == [LETTER]
    record.close()


def test_a_letter_leaves_the_outbox_with_the_commit_after_its_delivery(tmp_path: Path) -> None:
    record = opened(tmp_path)
    first, second = record.commit_judged(0, [LETTER, LETTER])
    record.delivered(first[4])
    assert [letter[4] for letter in record.letters()] == [first[4], second[4]]
    record.commit_batch(entry(1))
    assert [letter[4] for letter in record.letters()] == [second[4]]
    record.close()


def test_a_batch_that_says_nothing_leaves_its_number_to_the_next_commit(tmp_path: Path) -> None:
    record = opened(tmp_path)
    record.judged = record.commit_batch(entry(1))
    record.commit_batch(entry(2))
    record.close()
    record = opened(tmp_path)
    assert (record.number, record.judged) == (2, 1)
    record.close()


def test_snapshots_drop_the_journal_that_none_of_them_needs(tmp_path: Path) -> None:
    record = opened(tmp_path)
    for number in range(1, 7):
        record.commit_judged(record.commit_batch(entry(number)), [], snapshot(number) if number % 2 == 0 else None)
    assert record.snapshot() == (6, snapshot(6))
    assert [row.number for row in record.entries(4)] == [5, 6]
    record.close()


def test_a_damaged_snapshot_leaves_the_one_before_it(tmp_path: Path) -> None:
    record = opened(tmp_path)
    for number in (1, 2):
        record.commit_judged(record.commit_batch(entry(number)), [], snapshot(number))
    record.close()
    with sqlite3.connect(tmp_path / "quietmill.db") as db:
        db.execute("UPDATE snapshot SET body = zeroblob(length(body)) WHERE number = 2")
    db.close()
    record = opened(tmp_path)
    assert record.snapshot() == (1, snapshot(1))
    record.close()


def test_a_flipped_bit_in_the_journal_is_found(tmp_path: Path) -> None:
    record = opened(tmp_path)
    record.commit_batch(entry(1))
    record.close()
    with sqlite3.connect(tmp_path / "quietmill.db") as db:
        body = bytearray(db.execute("SELECT body FROM journal").fetchone()[0])
        body[5] ^= 1
        db.execute("UPDATE journal SET body = ?", (bytes(body),))
    db.close()
    record = opened(tmp_path)
    with pytest.raises(RecordError, match="journal entry 1 is damaged"):
        list(record.entries(0))
    record.close()


def test_a_record_is_held_by_one_service_and_read_by_others(tmp_path: Path) -> None:
    record = opened(tmp_path)
    assert "another running service holds it" in refusal(tmp_path)
    with sqlite3.connect(tmp_path / "quietmill.db") as reader:
        assert reader.execute("SELECT count(*) FROM journal").fetchone() == (0,)
    reader.close()
    record.close()
    opened(tmp_path).close()


def test_the_record_of_another_plant_is_refused(tmp_path: Path) -> None:
    opened(tmp_path).close()
    said = refusal(tmp_path, {**PLANT, "prefix": "other"})
    assert "belongs to the plant whose prefix is 'quietmill', the settings say 'other'" in said


def test_a_newer_record_is_refused(tmp_path: Path) -> None:
    opened(tmp_path).close()
    with sqlite3.connect(tmp_path / "quietmill.db") as db:
        db.execute("PRAGMA user_version = 99")
    db.close()
    assert "was written by a newer quietmill, in layout 99 and not 1" in refusal(tmp_path)


def test_a_file_of_something_else_is_refused_and_left_alone(tmp_path: Path) -> None:
    path = tmp_path / "quietmill.db"
    path.write_bytes(b"tiles " * 1000)
    assert "is no SQLite file" in refusal(tmp_path)
    assert path.read_bytes() == b"tiles " * 1000
    path.unlink()
    with sqlite3.connect(path) as db:
        db.execute("CREATE TABLE tiles (n)")
    db.close()
    assert "is a database of something else" in refusal(tmp_path)


def test_a_truncated_file_is_refused(tmp_path: Path) -> None:
    record = opened(tmp_path)
    for number in range(1, 50):
        record.commit_batch(entry(number))
    record.close()
    path = tmp_path / "quietmill.db"
    os.truncate(path, path.stat().st_size // 2 + 100)
    assert "damaged" in refusal(tmp_path)


def test_a_folder_that_is_not_there_is_said_so(tmp_path: Path) -> None:
    assert "cannot be opened" in refusal(tmp_path / "nowhere")


def test_a_full_disk_changes_nothing_and_passes(tmp_path: Path) -> None:
    record = opened(tmp_path)
    record.commit_batch(entry(1))
    db = record._db
    pages = db.execute("PRAGMA page_count").fetchone()[0]
    db.execute(f"PRAGMA max_page_count = {pages}")
    large = ReadingsEntry(os.urandom(200_000), False, {}, 2)
    with pytest.raises(RecordBusyError, match="the disk is full"):
        record.commit_batch(large)
    assert (record.number, len(list(record.entries(0)))) == (1, 1)
    db.execute("PRAGMA max_page_count = 1000000")
    assert record.commit_batch(large) == 2
    record.close()


def test_a_file_that_another_program_holds_is_tried_again_later(tmp_path: Path) -> None:
    record = opened(tmp_path)
    other = sqlite3.connect(tmp_path / "quietmill.db", isolation_level=None)
    other.execute("BEGIN IMMEDIATE")
    with pytest.raises(RecordBusyError, match="another program holds the file"):
        record.commit_batch(entry(1))
    other.execute("ROLLBACK")
    other.close()
    assert record.commit_batch(entry(1)) == 1
    record.close()


def test_a_commit_into_a_deleted_file_is_not_taken_for_one(tmp_path: Path) -> None:
    record = opened(tmp_path)
    (tmp_path / "quietmill.db").unlink()
    with pytest.raises(RecordLostError, match="was deleted or replaced"):
        record.commit_batch(entry(1))
    record.close()


def test_the_lock_is_let_go_when_opening_fails(tmp_path: Path) -> None:
    (tmp_path / "quietmill.db").write_bytes(b"tiles " * 1000)
    refusal(tmp_path)
    with (tmp_path / "quietmill.db.lock").open() as lock:
        fcntl.flock(lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
