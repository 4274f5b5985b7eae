"""What a start makes of the record, under the same settings and under others."""

from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pytest

from charts.feeding import readings_of
from quietmill.intake.message import Message
from quietmill.intake.redelivery import Redelivery
from quietmill.judging import Judging, Said, written
from quietmill.record.entries import ReadingsEntry
from quietmill.record.record import Letter, Record
from quietmill.recovery import Recovered, recover
from quietmill.settings import Characteristic
from quietmill.signals.event import Event

PLANT = {"source": "tileworks", "prefix": "quietmill"}


def characteristic(name: str = "press1.force", **more: object) -> Characteristic:
    return Characteristic.model_validate(
        {
            "id": name,
            "topic": f"t/{name}",
            "payload": {"value": "/v", "time": "/t"},
            "baseline": {"centre": 0.0, "sigma": 1.0},
            "rules": [{"beyond_limits": 3}, "same_side"],
            "ewma": {"lambda": 0.1, "L": 2.7},
            "cusum": {"k": 0.5, "h": 5},
            "gap": "90m",
            **more,
        }
    )


def letters(_judging: Judging, said: Said) -> list[Letter]:
    return letters_of(said.events)


def letters_of(events: Sequence[Event]) -> list[Letter]:
    return [("signals", event.document, False, None) for event in events]


def start(record: Record, *characteristics: Characteristic) -> Recovered:
    return recover(record, characteristics, "tileworks", letters, letters_of)


def values(count: int, seed: int) -> np.ndarray:
    stream = np.random.default_rng(seed)
    return stream.normal(size=count) + np.where(np.arange(count) % 80 > 50, 1.5, 0)


def batches(seed: int = 1) -> list[np.ndarray]:
    return np.array_split(readings_of(values(400, seed)), 8)


def journal(record: Record, readings: np.ndarray) -> int:
    return record.commit_batch(ReadingsEntry(readings.tobytes(), False, {}, int(readings["message"][-1]) + 1))


@pytest.fixture
def record(tmp_path: Path) -> Record:
    return Record(tmp_path / "quietmill.db", PLANT)


@pytest.mark.parametrize("judged", [0, 3, 8])
def test_entries_not_yet_judged_speak_and_the_others_are_silent(record: Record, judged: int) -> None:
    start(record, characteristic())
    undisturbed = Judging([characteristic()], "tileworks")
    expected = [letters(undisturbed, undisturbed.judge(batch)) for batch in batches()]
    for place, batch in enumerate(batches()):
        number = journal(record, batch)
        if place < judged:
            record.judged = number
    recovered = start(record, characteristic())
    assert [letter[:4] for letter in record.letters()] == [letter for said in expected[judged:] for letter in said]
    assert recovered.judging.bank.state.tobytes() == undisturbed.bank.state.tobytes()
    assert recovered.judging.bank.pool.tobytes() == undisturbed.bank.pool.tobytes()
    record.close()


def test_a_second_start_says_nothing_again(record: Record) -> None:
    start(record, characteristic())
    for batch in batches():
        journal(record, batch)
    start(record, characteristic())
    said = record.letters()
    start(record, characteristic())
    assert record.letters() == said
    record.close()


def test_resolved_settings_survive_the_way_into_the_record_and_back() -> None:
    for one in (
        characteristic(),
        characteristic(rules="nelson", cusum=None),
        characteristic(rules=[{"beyond_limits": 3.2}]),
    ):
        again = Characteristic.model_validate_json(written(one))
        assert again == one
        assert again.detector == one.detector


def after_reload(
    record: Record, before: Characteristic, *after: Characteristic
) -> tuple[Judging, Judging, list[bytes]]:
    """Judge a series that leaves a signal open, then start under other settings."""
    start(record, before)
    open_signal = readings_of([0.1, -0.2, 9.0])
    number = journal(record, open_signal)
    old = Judging([before], "tileworks")
    old.judge(open_signal)
    record.judged = number
    recovered = start(record, *after)
    found = [payload for _, payload, _, _, _ in record.letters()]
    record.close()
    return old, recovered.judging, found


def test_what_does_not_touch_judging_changes_in_place(record: Record) -> None:
    changed = characteristic(unit="kN", topic="elsewhere", reaction="look", quiet_points=4)
    old, new, said = after_reload(record, characteristic(), changed)
    assert new.bank.state.tobytes() == old.bank.state.tobytes()
    assert new.bank.pool.tobytes() == old.bank.pool.tobytes()
    assert int(new.bank.rows["quiet_points"][0]) == 4
    assert said == []


def test_what_touches_judging_starts_afresh_with_the_number_going_on(record: Record) -> None:
    _, new, said = after_reload(record, characteristic(), characteristic(baseline={"centre": 1.0, "sigma": 1.0}))
    assert (int(new.bank.state["number"][0]), int(new.bank.state["first"][0]), int(new.bank.state["open"][0])) == (
        3,
        4,
        0,
    )
    assert len(said) == 1
    assert b'"ended":"reload"' in said[0]
    points = new.judge(readings_of([1.0])[:1]).verdicts.points
    assert points["number"].tolist() == []  # a reading older than the last accepted one is still late
    later = readings_of([1.0], times=[10**12])
    assert new.judge(later).verdicts.points["number"].tolist() == [4]


def test_a_signal_of_a_characteristic_that_is_gone_returns(record: Record) -> None:
    _, _, said = after_reload(record, characteristic(), characteristic("press2.force"))
    assert len(said) == 1
    assert b'"ended":"removed"' in said[0]
    assert b'"type":"quietmill.signal.returned"' in said[0]


def test_characteristics_find_their_state_wherever_they_stand(record: Record) -> None:
    old, new, said = after_reload(record, characteristic(), characteristic("press0.force"), characteristic())
    assert new.bank.state[1].tobytes() == old.bank.state[0].tobytes()
    assert int(new.bank.state["number"][0]) == 0
    assert said == []


def message(mid: int, payload: bytes, dup: bool = False, qos: int = 1) -> Message:
    return Message("t", payload, qos, False, dup, mid, 0, 1)


def test_a_message_sent_again_is_told_by_its_packet_id_and_content() -> None:
    redelivery = Redelivery()
    first = [message(1, b"a"), message(2, b"b"), message(3, b"c")]
    assert redelivery.sift(first)[0] == first
    again = [message(2, b"b", dup=True), message(3, b"x", dup=True), message(4, b"d", dup=True), message(1, b"a")]
    fresh, changed = redelivery.sift(again)
    assert [one.payload for one in fresh] == [b"x", b"d", b"a"]
    assert set(changed) == {3, 4, 1}
    assert Redelivery(redelivery.seen).sift([message(1, b"a", dup=True)]) == ([], {})


def test_a_packet_id_used_for_something_new_is_forgotten() -> None:
    redelivery = Redelivery()
    redelivery.sift([message(1, b"a"), message(1, b"b")])
    assert [one.payload for one in redelivery.sift([message(1, b"a", dup=True)])[0]] == [b"a"]


def test_a_broker_without_a_session_makes_all_new() -> None:
    redelivery = Redelivery()
    redelivery.sift([message(1, b"a")])
    redelivery.forget()
    assert len(redelivery.sift([message(1, b"a", dup=True)])[0]) == 1


def test_qos_0_is_never_taken_for_sent_again() -> None:
    redelivery = Redelivery()
    assert len(redelivery.sift([message(0, b"a", qos=0), message(0, b"a", qos=0)])[0]) == 2
