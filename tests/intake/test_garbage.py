"""Whatever arrives is counted, and disturbs nothing else."""

import json
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from intake.wiring import ARRIVAL, characteristic, message
from quietmill.intake.message import Message
from quietmill.intake.routes import MAX_PAYLOAD_BYTES, Routes
from quietmill.model import Outcome

PLANT = Routes(
    [
        characteristic("number", "number"),
        characteristic("json", "json", value="/force", time="/at", sequence="/n"),
        characteristic("root", "root", value="", strings="parse"),
        characteristic("array", "array", array="/batch", value="/v", time="/t"),
        characteristic("first", "shared", value="/force"),
        characteristic("second", "shared", value="/moisture", time="/at"),
        characteristic("third", "shared", retained="accept"),
    ]
)
GARBAGE = {
    "empty": b"",
    "white space": b" \n",
    "not UTF-8": b'{"force": 240, "x": "\xff\xfe"}',
    "UTF-16": '{"force": 240}'.encode("utf-16"),
    "byte order mark": b'\xef\xbb\xbf{"force": 240}',
    "binary": bytes(range(256)),
    "truncated": b'{"force": 240, "at"',
    "deep": b"[" * 10_000 + b"]" * 10_000,
    "deep and open": b'{"force":' * 10_000,
    "1e999": b'{"force": 1e999, "at": 0, "n": 1}',
    "bare 1e999": b"1e999",
    "NaN": b'{"force": NaN, "at": 0, "n": 1}',
    "bare NaN": b"NaN",
    "Infinity": b'{"force": -Infinity, "at": 0, "n": 1}',
    "400 digits": b'{"force": ' + b"7" * 400 + b', "at": 0, "n": 1}',
    "bare 400 digits": b"7" * 400,
    "5000 digits": b'{"force": ' + b"7" * 5000 + b', "at": 0, "n": 1}',
    "time of 400 digits": b'{"force": 1, "at": ' + b"7" * 400 + b', "n": 1}',
    "time of a great exponent": b'{"force": 1, "at": 1e99999999, "n": 1.5e99999999}',
    "arrays of arrays": b"[[[1, 2], [3]], [[]]]",
    "items of every kind": b'{"batch": [null, true, "x", [], {}, 1, {"v": 1}, {"v": [1], "t": 0}, {"v": 1, "t": "x"}]}',
    "true": b"true",
    "null": b"null",
    "text": b'"12,5"',
    "two documents": b'{"force": 240}{"force": 240}',
    "lone surrogate": b'{"force": "\\ud800", "at": "\\ud800", "n": 1}',
    "10 MB": b"[" + b"1," * 5_000_000 + b"1]",
    "10 MB number": b"1" * 10_000_000,
    "just small enough": b"[" + b"1e999," * (MAX_PAYLOAD_BYTES // 6 - 6) + b"1]",
}
TOPICS = [*PLANT.topics, "elsewhere"]
GOOD = [
    message("240.5", "number"),
    message('{"force": 240, "at": 1740902400.1234565, "n": 5}', "json"),
    message('"240.25"', "root"),
    message('{"t": 20, "batch": [{"v": 1}, {"v": 2, "t": 30}]}', "array"),
    message('{"force": 240, "moisture": 5, "at": "2026-03-02T08:14:30Z"}', "shared"),
    message("240", "shared", retain=True),
]
MESSAGES = st.builds(
    message,
    st.one_of(
        st.binary(max_size=60),
        st.sampled_from([content for content in GARBAGE.values() if len(content) < 1000]),
        st.recursive(
            st.none() | st.booleans() | st.floats() | st.integers() | st.text(max_size=5),
            lambda inner: (
                st.lists(inner, max_size=4)
                | st.dictionaries(
                    st.sampled_from(["force", "moisture", "at", "n", "batch", "v", "t"]), inner, max_size=5
                )
            ),
            max_leaves=12,
        ).map(json.dumps),
        st.sampled_from([good.payload for good in GOOD]),
    ),
    st.sampled_from(TOPICS),
    arrival=st.integers(0, 2 * ARRIVAL),
    retain=st.booleans(),
)


@pytest.mark.parametrize("topic", TOPICS)
@pytest.mark.parametrize("kind", GARBAGE)
def test_garbage_is_counted_and_explained(kind: str, topic: str) -> None:
    decoded = PLANT.decode([message(GARBAGE[kind], topic)], 0)
    assert sum(decoded.refused.values()) > 0
    assert {note.outcome for note in decoded.notes} == set(decoded.refused)
    assert all(len(note.text) < 500 for note in decoded.notes)


@given(st.lists(MESSAGES, max_size=12))
def test_every_reading_gets_exactly_one_outcome(messages: list[Message]) -> None:
    decoded = PLANT.decode(messages, 0)
    assert np.isfinite(decoded.readings["value"]).all()
    assert Outcome.ACCEPTED not in decoded.refused
    alone = [PLANT.decode([one], 0) for one in messages]
    assert len(decoded.readings) == sum(len(one.readings) for one in alone)
    for one, sent in zip(alone, messages, strict=True):
        assert len(one.readings) + sum(one.refused.values()) in outcomes_due(sent)


def outcomes_due(sent: Message) -> set[int]:
    """How many outcomes a message may have, counted by another decoder from the wiring of the plant above."""
    try:
        document = json.loads(sent.payload.decode())
    except ValueError:
        document = ValueError
    if sent.topic == "shared":  # not_json holds for all three, or for two and the third takes text
        return {2} if sent.retain else {1, 2} if document is ValueError else {3}
    if sent.topic == "array" and not sent.retain and isinstance(document, dict):
        batch = document.get("batch")
        return {len(batch) if isinstance(batch, list) else 1}
    return {1}


@given(st.lists(MESSAGES, max_size=12), st.data())
def test_good_messages_among_garbage_give_the_same_readings(garbage: list[Message], data: st.DataObject) -> None:
    alone = PLANT.decode(GOOD, 0).readings
    mixed = list(garbage)
    places = sorted(data.draw(st.lists(st.integers(0, len(garbage)), min_size=len(GOOD), max_size=len(GOOD))))
    for place, good in reversed(list(zip(places, GOOD, strict=True))):
        mixed.insert(place, good)
    numbers = [place + before for before, place in enumerate(places)]
    decoded = PLANT.decode(mixed, 0).readings
    kept = decoded[np.isin(decoded["message"], numbers)]
    kept["message"] = np.searchsorted(numbers, kept["message"])
    assert kept.tolist() == alone.tolist()


@given(st.lists(MESSAGES, max_size=12), st.lists(st.integers(0, 12)))
def test_every_way_of_cutting_a_stream_gives_the_same(messages: list[Message], cuts: list[int]) -> None:
    whole = PLANT.decode(messages, 5)
    edges = [0, *sorted(min(cut, len(messages)) for cut in cuts), len(messages)]
    readings, refused, number = [], dict.fromkeys(Outcome, 0), 5
    for first, last in pairwise(edges):
        part = PLANT.decode(messages[first:last], number)
        number = part.messages
        readings += part.readings.tolist()
        for outcome, count in part.refused.items():
            refused[outcome] += count
    assert readings == whole.readings.tolist()
    assert {outcome: count for outcome, count in refused.items() if count} == whole.refused
    assert number == whole.messages


@given(st.binary(max_size=200), st.sampled_from(TOPICS))
def test_arbitrary_bytes_never_raise_nor_vanish(content: bytes, topic: str) -> None:
    decoded = PLANT.decode([message(content, topic)], 0)
    assert len(decoded.readings) + sum(decoded.refused.values()) > 0 or topic == "array"
