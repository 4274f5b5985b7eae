import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from intake.wiring import ARRIVAL, JSON, TOPIC, characteristic, message, refused
from quietmill.intake.routes import MAX_PAYLOAD_BYTES, Routes
from quietmill.model import NO_TIME, Outcome

PLAIN = Routes([characteristic()])
TIMED = Routes([characteristic(**JSON)])


def test_a_plain_number_is_a_reading_at_its_arrival() -> None:
    (reading,) = PLAIN.decode([message("240.5")], 7).readings
    assert (reading["row"], reading["message"], reading["value"]) == (0, 7, 240.5)
    assert (reading["time"], reading["arrival"], reading["sequence"]) == (ARRIVAL, ARRIVAL, NO_TIME)
    assert (reading["size"], reading["subgroup"]) == (0, 0)


def test_a_reading_with_a_time_of_its_own_keeps_both_times() -> None:
    (reading,) = TIMED.decode([message('{"force": 240.5, "at": 0}')], 0).readings
    assert (reading["time"], reading["arrival"]) == (0, ARRIVAL)


def test_readings_stand_in_order_of_arrival_and_messages_are_numbered_through() -> None:
    routes = Routes([characteristic("a", "a"), characteristic("b", "b")])
    decoded = routes.decode([message("1", "b"), message("2", "a"), message("x", "a"), message("3", "b")], 10)
    assert decoded.readings["row"].tolist() == [1, 0, 1]
    assert decoded.readings["value"].tolist() == [1, 2, 3]
    assert decoded.readings["message"].tolist() == [10, 11, 13]
    assert decoded.messages == 14


def test_topics_are_told_once_each_in_the_order_of_the_settings() -> None:
    routes = Routes([characteristic("a", "z"), characteristic("b", "a", **JSON), characteristic("c", "z", **JSON)])
    assert routes.topics == ("z", "a")


def test_one_message_feeds_every_characteristic_of_its_topic() -> None:
    pair = [characteristic("f", value="/force"), characteristic("m", value="/moisture", time="/at", centre=5.0)]
    readings = Routes(pair).decode([message('{"force": 240, "moisture": 5.5, "at": 10}')], 3).readings
    assert readings[["row", "message", "time", "value"]].tolist() == [(0, 3, ARRIVAL, 240.0), (1, 3, 10_000_000, 5.5)]


def test_value_times_scale_plus_offset_is_the_reading() -> None:
    routes = Routes([characteristic(value="/f", scale=0.1, offset=-2.5), characteristic("b", "b", scale=2.0)])
    readings = routes.decode([message('{"f": 2425}'), message("120", "b")], 0).readings
    assert readings["value"].tolist() == [2425 * 0.1 - 2.5, 240.0]


def test_a_value_that_is_not_finite_after_scaling_is_not_a_number() -> None:
    routes = Routes([characteristic(scale=1e300)])
    assert refused(routes.decode([message("1e300"), message("-1e300"), message("1e999")], 0)) == {"not_a_number": 3}


@pytest.mark.parametrize(
    ("content", "outcome"),
    [
        ('{"force": 240, "at": 7258118400}', "future"),
        ('{"force": 240, "at": 1772439570.000001}', "future"),
        ('{"force": 1e12, "at": 0}', "out_of_range"),
        ('{"force": NaN, "at": 0}', "not_a_number"),
        ('{"force": 1e999, "at": 0}', "not_a_number"),
        ('{"force": true, "at": 0}', "not_a_number"),
        ('{"force": "240", "at": 0}', "not_a_number"),
        ('{"at": 0}', "no_member"),
        ('{"force": 240}', "no_member"),
        ('{"force": 240, "at": "noon"}', "bad_time"),
        ('{"force": 240, "at": 0', "not_json"),
        ("", "not_json"),
    ],
)
def test_a_refused_reading_is_counted_by_its_reason(content: str, outcome: str) -> None:
    decoded = TIMED.decode([message(content)], 0)
    assert (len(decoded.readings), refused(decoded)) == (0, {outcome: 1})


@pytest.mark.parametrize("at", ["0", '"1970-01-01T00:00:00Z"', "1772439570", "-62135596800"])
def test_age_is_never_a_reason_to_refuse(at: str) -> None:
    decoded = TIMED.decode([message(f'{{"force": 240, "at": {at}}}')], 0)
    assert (len(decoded.readings), refused(decoded)) == (1, {})


def test_what_holds_for_a_message_is_counted_once_and_what_holds_for_a_reading_each_time() -> None:
    three = [characteristic("a", value="/a"), characteristic("b", value="/b"), characteristic("c")]
    broken = Routes(three).decode([message("{"), message(b"\xff")], 0)
    assert refused(broken) == {"not_json": 2, "not_a_number": 1}
    assert refused(Routes(three).decode([message('{"x": 5}')], 0)) == {"no_member": 2, "not_a_number": 1}


def test_a_topic_without_characteristic_is_unrouted() -> None:
    decoded = PLAIN.decode([message("240", "tiles/press/2/force"), message("240", "")], 0)
    assert refused(decoded) == {"unrouted": 2}


def test_a_payload_may_have_256_kib_and_no_more() -> None:
    full = "240".ljust(MAX_PAYLOAD_BYTES)
    decoded = PLAIN.decode([message(full), message(full + " "), message("9" * 10_000_000)], 0)
    assert (decoded.readings["value"].tolist(), refused(decoded)) == ([240.0], {"too_large": 2})


def test_retained_messages_are_skipped_once_each_or_accepted_as_the_settings_say() -> None:
    routes = Routes([characteristic("a"), characteristic("b"), characteristic("c", retained="accept")])
    decoded = routes.decode([message("240", retain=True)], 0)
    assert (decoded.readings["row"].tolist(), refused(decoded)) == ([2], {"retained": 1})


def test_a_retained_message_is_skipped_unread() -> None:
    kept = [message("9" * 10_000_000, retain=True), message("", retain=True)]
    assert refused(PLAIN.decode(kept, 0)) == {"retained": 2}


def test_no_messages_give_no_readings() -> None:
    decoded = PLAIN.decode([], 5)
    assert (len(decoded.readings), refused(decoded), list(decoded.notes), decoded.messages) == (0, {}, [], 5)


def test_a_message_of_one_reading_has_the_fingerprint_of_its_value() -> None:
    told = [("240", 1), ("240.0", 2), ("241", 2)]
    sent = [message(f'{{"force": {force}, "at": {at}, "x": {at}}}') for force, at in told]
    readings = TIMED.decode(sent, 0).readings
    assert readings["fingerprint"].tolist() == readings["value"].view(np.uint64).tolist()


def test_both_zeros_are_the_same_value() -> None:
    readings = Routes([characteristic(centre=0.0)]).decode([message("0"), message("-0.0")], 0).readings
    assert readings["fingerprint"].tolist() == [0, 0]


def test_a_message_of_several_readings_has_the_fingerprint_of_its_topic_and_payload() -> None:
    routes = Routes([characteristic("a", "a", array="", value=""), characteristic("b", "b", array="", value="")])
    sent = [message("[1,2]", "a"), message("[1,2]", "a"), message("[1, 2]", "a"), message("[1,2]", "b")]
    prints = routes.decode(sent, 0).readings["fingerprint"].tolist()
    assert prints[0:2] == prints[2:4]
    assert len({*prints[0::2], *prints[1::2]}) == 3


def test_the_fingerprint_of_a_payload_is_the_same_in_every_process() -> None:
    routes = Routes([characteristic("a", "a", array="", value="")])
    expected = 0x4B6A0268ECC763EA  # as `b2sum -l 64` says of the bytes of topic, zero byte and payload
    assert routes.decode([message("[1,2]", "a")], 0).readings["fingerprint"].tolist() == [expected, expected]


def test_refused_readings_do_not_change_what_kind_of_message_it_is() -> None:
    pair = Routes([characteristic("a", value="/a"), characteristic("b", value="/b")])
    whole, half, far = pair.decode(
        [message('{"a": 1, "b": 2}'), message('{"a": 1}'), message('{"a": 1, "b": 1e99}')], 0
    ).readings["fingerprint"][[0, 2, 3]]
    assert len({whole, half, far, np.float64(1).view(np.uint64)}) == 4


def test_the_log_gets_one_example_an_outcome_that_says_who_where_and_what() -> None:
    sent = ['{"force": "off", "at": 0}', '{"force": "on", "at": 0}', "oops"]
    notes = TIMED.decode([*map(message, sent), message("1", "x")], 0).notes
    assert [note.outcome for note in notes] == [Outcome.NOT_A_NUMBER, Outcome.NOT_JSON, Outcome.UNROUTED]
    assert notes[0].topic == TOPIC
    assert notes[0].text == (
        'press1.force: expected a number at /force, got a payload of 25 bytes: {"force": "off", "at": 0}'
    )


def test_a_screened_reading_is_shown_with_its_own_message() -> None:
    sent = [message('{"force": 1, "at": 0}'), message('{"force": 1, "at": 7258118400}')]
    (note,) = TIMED.decode(sent, 100).notes
    assert "press1.force: expected a time at most 5 minutes after its arrival" in note.text
    assert "7258118400" in note.text


@given(st.binary(max_size=400), st.text(max_size=400))
def test_what_the_log_shows_is_printable_and_bounded(content: bytes, topic: str) -> None:
    for note in [*TIMED.decode([message(content)], 0).notes, *TIMED.decode([message(content, topic)], 0).notes]:
        assert note.text.isprintable()
        assert note.topic.isprintable()
        assert len(note.text) < 400
        assert len(note.topic) <= 80
