import json
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from quietmill.intake.payloads.format import Refusal
from quietmill.intake.payloads.json import MAX_DEPTH, JsonReader
from quietmill.model import NO_TIME
from quietmill.settings import Payload

TIME = 1_772_439_270_250_000


def answers_to(content: str | bytes, **keys: object) -> list[object]:
    """Samples as they come, refusals as the name of their outcome."""
    data = content.encode() if isinstance(content, str) else content
    document = JsonReader.parse(data)
    if isinstance(document, Refusal):
        return [document.outcome.label]
    samples = JsonReader(Payload(**keys)).read(document, data)
    return [sample.outcome.label if isinstance(sample, Refusal) else sample for sample in samples]


def value_of(member: str, **keys: object) -> object:
    (answer,) = answers_to(f'{{"force": {member}}}', value="/force", **keys)
    return answer if isinstance(answer, str) else answer[0]


def time_of(member: str, **keys: object) -> object:
    (answer,) = answers_to(f'{{"force": 240, "at": {member}}}', value="/force", time="/at", **keys)
    return answer if isinstance(answer, str) else answer[1]


def sequence_of(member: str, **keys: object) -> object:
    (answer,) = answers_to(f'{{"force": 240, "n": {member}}}', value="/force", sequence="/n", **keys)
    return answer if isinstance(answer, str) else answer[2]


def test_pointers_say_where_value_time_and_sequence_stand() -> None:
    content = '{"press": {"force": [0, 240.5]}, "at": "2026-03-02T08:14:30.25Z", "n": 17}'
    assert answers_to(content, value="/press/force/1", time="/at", sequence="/n") == [(240.5, TIME, 17)]


def test_what_no_pointer_asks_for_has_no_time_and_no_sequence() -> None:
    assert answers_to('{"force": 240, "at": 5, "n": 6}', value="/force") == [(240.0, NO_TIME, NO_TIME)]


def test_the_empty_pointer_is_the_whole_document() -> None:
    assert answers_to(" 240.5 ", value="") == [(240.5, NO_TIME, NO_TIME)]


@pytest.mark.parametrize("member", ["text", "", "12.5", "true", "false", "null", "NaN", "[]", "[1]", "{}", "[[1]]"])
def test_a_value_that_is_no_number_is_refused(member: str) -> None:
    quoted = member if member in {"true", "false", "null", "NaN"} or member[:1] in {"[", "{"} else json.dumps(member)
    expected = "nan" if member == "NaN" else "not_a_number"
    assert str(value_of(quoted)) == expected


@pytest.mark.parametrize("member", ["NaN", "Infinity", "-Infinity", "1e999", "-1e999", "1" * 400, "1" * 5000])
def test_numbers_beyond_json_and_doubles_are_left_to_screening_and_spare_the_rest(member: str) -> None:
    content = f'{{"force": {member}, "moisture": 5.5}}'
    assert answers_to(content, value="/moisture") == [(5.5, NO_TIME, NO_TIME)]
    assert str(value_of(member)) in {"nan", "inf", "-inf"}


@given(st.integers(-(2**80), 2**80))
def test_integers_become_the_nearest_double(number: int) -> None:
    assert value_of(str(number)) == float(Fraction(number))


@pytest.mark.parametrize("digits", [17, 400, 4000])
def test_a_finite_number_of_many_digits_is_a_number(digits: int) -> None:
    assert value_of("0." + "3" * digits) == 1 / 3


def test_of_several_members_of_one_name_the_last_counts() -> None:
    assert value_of('1, "force": 2') == 2.0
    assert answers_to('{"force": 1, "x": NaN, "force": 2}', value="/force")[0][0] == 2.0


@pytest.mark.parametrize(
    "content",
    [
        b"",
        b" ",
        b"{",
        b'{"force": 240',
        b'{"force": 240}}',
        b'{"force": 240} {"force": 241}',
        b"{'force': 240}",
        b'{"force": 240,}',
        b'{"force": 01}',
        b'{"force": +1}',
        b'{"force": .5}',
        b'{"force": 1_000}',
        b'{"force": nan}',
        b'{"force": 240} // fine',
        b'{"x": "\x01", "force": 240}',
        b'{"x": "\xff", "force": 240}',
        b'{"x": "\xed\xa0\x80", "force": 240}',
        b'\xef\xbb\xbf{"force": 240}',
        '{"force": 240}'.encode("utf-16"),
        b'{"force": 240}\x00',
        b"\x00" * 100,
        b"[" * 10_000,
        b"[" * 10_000 + b"]" * 10_000,
        b'{"a":' * 10_000 + b"1" + b"}" * 10_000,
        b"[" * 10_000 + b"NaN" + b"]" * 10_000,
    ],
    ids=lambda content: repr(content[:20]),
)
def test_what_is_no_json_is_refused_once_for_everyone(content: bytes) -> None:
    assert answers_to(content, value="/force") == ["not_json"]


@pytest.mark.parametrize(("levels", "answer"), [(MAX_DEPTH, "no_member"), (MAX_DEPTH + 1, "not_json")])
@pytest.mark.parametrize("innermost", ["", "NaN", '"]]]"'])
def test_nesting_is_json_up_to_the_depth_that_is_told(levels: int, answer: str, innermost: str) -> None:
    content = "[" * levels + innermost + "]" * levels
    assert answers_to(content.ljust(2 * MAX_DEPTH + 10), value="/force") == [answer]


@pytest.mark.parametrize("content", ["{}", "[]", "5", '"force"', "null", '{"Force": 1}', '[{"force": 1}]'])
def test_a_missing_value_is_no_member(content: str) -> None:
    assert answers_to(content, value="/force") == ["no_member"]


def test_a_configured_time_or_sequence_that_is_missing_is_no_member() -> None:
    assert answers_to('{"force": 240}', value="/force", time="/at") == ["no_member"]
    assert answers_to('{"force": 240}', value="/force", sequence="/n") == ["no_member"]


@pytest.mark.parametrize(
    ("member", "unit", "microseconds"),
    [
        ('"2026-03-02T08:14:30.25Z"', None, TIME),
        ('"2026-03-02t09:14:30.25+01:00"', "ms", TIME),
        ("1772439270.25", None, TIME),
        ("1772439270250", None, TIME),
        ("1772439270250.0", None, TIME),
        ("1772439270250000", "us", TIME),
        ("1772439270250000499", "ns", TIME),
        ("1.77243927025e9", "s", TIME),
        ("0", None, 0),
        ("-1", None, -1_000_000),
        ("1740902400.1234565", None, 1740902400_123456),
        ("1740902400.1234575", None, 1740902400_123458),
        ("1740902400.12345650000000001", None, 1740902400_123457),
        ("99999999999.9999999999", None, 100_000_000_000_000_000),
        ("7258118400", None, 7_258_118_400_000_000),
    ],
)
def test_times_are_read_exactly(member: str, unit: str | None, microseconds: int) -> None:
    assert time_of(member, time_unit=unit) == microseconds


@given(st.decimals(0, 4 * 10**9, places=8))
def test_decimal_seconds_round_half_to_even_as_written(seconds: object) -> None:
    assert time_of(f"{seconds:f}") == round(Fraction(f"{seconds:f}") * 10**6)


@pytest.mark.parametrize(
    "member",
    [
        "true",
        "null",
        "[]",
        "{}",
        '""',
        '"yesterday"',
        '"1772439270"',
        '"2026-03-02T08:14:30"',
        '"2026-02-30T08:14:30Z"',
        "NaN",
        "Infinity",
        "1e999",
        "1e99999999999999999999",
        "1e300",
        "1" * 400,
        "9" * 5000,
        "-62135596801",
    ],
)
def test_a_time_that_is_none_is_bad_time(member: str) -> None:
    assert time_of(member) == "bad_time"


def test_exact_times_survive_what_only_the_careful_decoder_reads() -> None:
    content = '{"force": 240.5, "at": 1740902400.1234565, "x": NaN}'
    assert answers_to(content, value="/force", time="/at") == [(240.5, 1740902400_123456, NO_TIME)]


@pytest.mark.parametrize(
    ("member", "sequence"),
    [
        ("0", 0),
        ("17", 17),
        ("17.0", 17),
        ("1e3", 1000),
        ("-5", -5),
        ("9007199254740993.0", 2**53 + 1),
        (f"{2**63 - 1}", 2**63 - 1),
    ],
)
def test_a_whole_number_is_a_sequence(member: str, sequence: int) -> None:
    assert sequence_of(member) == sequence


@pytest.mark.parametrize(
    "member",
    ["17.5", '"17"', "true", "null", "[]", "NaN", "1e999", "1e99999999", "1e-99999999", f"{2**63}", f"{-(2**63)}"],
)
def test_a_sequence_that_is_no_whole_number_of_63_bits_is_not_a_number(member: str) -> None:
    assert sequence_of(member) == "not_a_number"


def test_with_strings_parse_text_is_taken_as_the_number_it_holds() -> None:
    assert value_of('" 12.5 "', strings="parse") == 12.5
    assert time_of('"1740902400.1234565"', strings="parse") == 1740902400_123456
    assert time_of('"2026-03-02T08:14:30.25Z"', strings="parse") == TIME
    assert sequence_of('"17"', strings="parse") == 17


@pytest.mark.parametrize(
    "member", ['""', '"12,5"', '"1_000"', '"NaN"', '"Infinity"', '"+1"', '"12.5 kN"', "true", "null"]
)
def test_with_strings_parse_text_still_follows_the_grammar_of_numbers(member: str) -> None:
    assert value_of(member, strings="parse") == "not_a_number"


def test_an_array_gives_one_reading_an_item_in_its_order() -> None:
    content = '{"batch": [{"v": 1, "t": 10}, {"v": 2, "t": 20}]}'
    found = answers_to(content, array="/batch", value="/v", time="/t")
    assert found == [(1.0, 10_000_000, NO_TIME), (2.0, 20_000_000, NO_TIME)]


def test_what_an_item_does_not_have_is_looked_for_at_the_root() -> None:
    content = '{"t": 10, "n": 7, "batch": [{"v": 1}, {"v": 2, "t": 20}]}'
    found = answers_to(content, array="/batch", value="/v", time="/t", sequence="/n")
    assert found == [(1.0, 10_000_000, 7), (2.0, 20_000_000, 7)]


def test_bad_items_are_refused_one_by_one() -> None:
    content = '{"batch": [{"v": 1, "t": 10}, {"t": 10}, {"v": "x", "t": 10}, 5, {"v": 2, "t": "x"}, {"v": 3, "t": 30}]}'
    found = answers_to(content, array="/batch", value="/v", time="/t")
    assert [answer for answer in found if isinstance(answer, str)] == [
        "no_member",
        "not_a_number",
        "no_member",
        "bad_time",
    ]
    assert [found[0][0], found[-1][0]] == [1.0, 3.0]


def test_items_may_be_bare_numbers_or_pairs() -> None:
    assert [found[0] for found in answers_to("[1, 2.5]", array="", value="")] == [1.0, 2.5]
    pairs = answers_to("[[10, 1.5], [20, 2.5]]", array="", value="/1", time="/0")
    assert pairs == [(1.5, 10_000_000, NO_TIME), (2.5, 20_000_000, NO_TIME)]


def test_arrays_within_the_array_are_not_numbers() -> None:
    assert answers_to("[[1], [[2]], 3]", array="", value="") == [
        "not_a_number",
        "not_a_number",
        (3.0, NO_TIME, NO_TIME),
    ]


def test_an_empty_array_has_no_readings() -> None:
    assert answers_to('{"batch": []}', array="/batch", value="/v") == []


@pytest.mark.parametrize(
    "content", ["{}", '{"batch": null}', '{"batch": {"0": 1}}', '{"batch": "12"}', '{"batch": 12}']
)
def test_a_list_that_is_missing_is_no_member(content: str) -> None:
    assert answers_to(content, array="/batch", value="") == ["no_member"]
