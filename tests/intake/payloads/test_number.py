import pytest
from hypothesis import given
from hypothesis import strategies as st

from quietmill.intake.payloads.number import NumberReader
from quietmill.model import NO_TIME, Outcome
from quietmill.numeral import number_text


def answer_to(payload: bytes) -> object:
    """The value of the one reading, or the outcome that refused it."""
    document = NumberReader.parse(payload)
    if not isinstance(document, str):
        return document.outcome
    (sample,) = NumberReader().read(document, payload)
    return sample[0] if sample[1:] == (NO_TIME, NO_TIME) else sample.outcome


@given(st.floats(allow_nan=False, allow_infinity=False))
def test_every_double_is_read_bit_for_bit(value: float) -> None:
    assert answer_to(repr(value).encode()) == value


@pytest.mark.parametrize(
    ("payload", "value"),
    [
        (b"240", 240.0),
        (b" \t240.5\r\n", 240.5),
        (b"-0.5e-3", -0.0005),
        (b"1E+2", 100.0),
        (b"9007199254740993", 9007199254740992.0),
        (b"9007199254740995", 9007199254740996.0),
        (b"0." + b"3" * 400, 1 / 3),
        (b"1e-999", 0.0),
    ],
)
def test_json_numbers_with_white_space_around_them_are_read(payload: bytes, value: float) -> None:
    assert answer_to(payload) == value


@pytest.mark.parametrize("payload", [b"1e999", b"-1e999", b"1" * 400])
def test_numbers_beyond_every_double_are_left_to_screening(payload: bytes) -> None:
    assert abs(answer_to(payload)) == float("inf")


@pytest.mark.parametrize(
    "text",
    [
        *("1_000", "+1", "01", ".5", "5.", "1e", "0x10", "1,5", "12kN", "1;2", "-", "1 2", "1\x002", "\u0663"),
        *("NaN", "nan", "Infinity", "-Infinity", "inf", "true", "null", "[]", "{}", "[1]", '"12.5"'),
    ],
)
def test_text_that_is_no_json_number_is_not_a_number(text: str) -> None:
    assert answer_to(text.encode()) is Outcome.NOT_A_NUMBER


@pytest.mark.parametrize(
    "payload", [b"", b" \r\n", b"\xff\xfe", b"12\x80", b"\xef\xbb\xbf12.5", "12.5".encode("utf-16")]
)
def test_what_is_empty_or_no_plain_utf_8_is_not_json(payload: bytes) -> None:
    assert answer_to(payload) is Outcome.NOT_JSON


def test_white_space_beyond_that_of_json_is_not_dropped() -> None:
    assert number_text("\u00a012.5") is None
    assert number_text("12.5\f") is None
