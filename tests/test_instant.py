from datetime import UTC, datetime, timedelta, timezone
from decimal import Decimal
from fractions import Fraction

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from quietmill.instant import FIRST, LAST, UNITS, format_time, from_float, from_number, parse_time

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
OFFSETS = st.integers(-23 * 60 - 59, 23 * 60 + 59).map(lambda minutes: timezone(timedelta(minutes=minutes)))


@given(st.integers(FIRST, LAST))
@example(FIRST)
@example(LAST)
def test_every_instant_is_read_back_as_it_was_written(instant: int) -> None:
    assert parse_time(format_time(instant)) == instant


@given(st.datetimes(datetime(2, 1, 1), datetime(9998, 12, 31), timezones=OFFSETS))  # noqa: DTZ001 (bounds have no zone)
def test_times_with_offsets_agree_with_datetime(time: datetime) -> None:
    assert parse_time(time.isoformat()) == (time - EPOCH) // timedelta(microseconds=1)


@given(st.integers(FIRST, LAST))
def test_times_are_written_as_datetime_writes_them_less_the_needless_digits(instant: int) -> None:
    text = (EPOCH + timedelta(microseconds=instant)).strftime("%m-%dT%H:%M:%S.%f").rstrip("0").rstrip(".")
    assert format_time(instant)[5:] == f"{text}Z"


@pytest.mark.parametrize(
    ("text", "same"),
    [
        ("2026-03-02t08:14:30z", "2026-03-02T08:14:30Z"),
        ("2026-03-02 08:14:30Z", "2026-03-02T08:14:30Z"),
        ("2026-03-02T08:14:30.2500Z", "2026-03-02T08:14:30.25Z"),
        ("2026-03-02T00:14:30+05:45", "2026-03-01T18:29:30Z"),
        ("2026-03-02T23:14:30-08:00", "2026-03-03T07:14:30Z"),
        ("2026-03-02T08:14:30-00:00", "2026-03-02T08:14:30Z"),
        ("2016-12-31T23:59:60Z", "2017-01-01T00:00:00Z"),
        ("2016-12-31T15:59:60.5-08:00", "2017-01-01T00:00:00.5Z"),
        ("2024-02-29T00:00:00Z", "2024-02-29T00:00:00Z"),
        ("0001-01-01T00:00:00Z", "0001-01-01T00:00:00Z"),
    ],
)
def test_every_form_that_the_rfc_allows_is_read(text: str, same: str) -> None:
    assert format_time(parse_time(text)) == same


@pytest.mark.parametrize(
    "text",
    [
        "",
        "2026-03-02",
        "2026-03-02T08:14Z",
        "2026-03-02T08:14:30",
        "20260302T081430Z",
        "2026-W10-1T08:14:30Z",
        "2026-03-02T08:14:30,5Z",
        "2026-03-02T08:14:30.Z",
        "2026-03-02T08:14:30+0100",
        "2026-03-02T08:14:30+01",
        "2026-03-02T08:14:30+24:00",
        "2026-03-02T08:14:30Z\n",
        " 2026-03-02T08:14:30Z",
        "2026-03-02T24:00:00Z",
        "2026-03-02T08:60:00Z",
        "2026-03-02T08:14:61Z",
        "2026-03-02T08:14:60Z",
        "2026-02-29T08:14:30Z",
        "2026-13-01T08:14:30Z",
        "0000-01-01T00:00:00Z",
        "0001-01-01T00:00:00+00:01",
        "9999-12-31T23:59:59-00:01",
        "9999-12-31T23:59:59.9999999Z",
        "٢٠٢٦-03-02T08:14:30Z",
        "1772439270",
    ],
)
def test_anything_else_is_refused_in_plain_words(text: str) -> None:
    with pytest.raises(ValueError, match="must "):
        parse_time(text)


@given(st.text("0123456789", min_size=1, max_size=60))
@example("0000005")
@example("0000015")
@example("00000050000000000000000000000000000000000000000000000000001")
def test_fractions_of_any_length_round_half_to_even(digits: str) -> None:
    exact = round(Fraction(int(digits), 10 ** len(digits)) * 10**6)
    assert parse_time(f"2026-03-02T08:14:30.{digits}Z") == parse_time("2026-03-02T08:14:30Z") + exact


@given(st.decimals(-(10**10), 10**10, places=12), st.sampled_from(sorted(UNITS)))
def test_numbers_round_half_to_even_exactly_in_every_unit(number: Decimal, unit: str) -> None:
    assert from_number(number, unit) == round(Fraction(number) * Fraction(10) ** UNITS[unit])


def test_seven_digits_behind_the_point_are_exact_where_a_double_is_not() -> None:
    assert from_number(Decimal("1740902400.1234565")) == 1740902400123456
    assert from_number(Decimal("1740902400.1234575")) == 1740902400123458
    assert from_number(Decimal("1740902400.12345650000000000000000000001")) == 1740902400123457


def test_a_number_without_a_unit_is_seconds_below_1e11_and_milliseconds_from_there_on() -> None:
    assert format_time(from_number(99_999_999_999)) == "5138-11-16T09:46:39Z"
    assert format_time(from_number(100_000_000_000)) == "1973-03-03T09:46:40Z"
    assert format_time(from_number(Decimal("99999999999.5"))) == "5138-11-16T09:46:39.5Z"
    assert format_time(from_number(-1)) == "1969-12-31T23:59:59Z"


@pytest.mark.parametrize(
    ("number", "unit", "instant"),
    [
        (1772439270, "s", 1772439270_000000),
        (1772439270, "ms", 1772439270_000),
        (1772439270, "us", 1772439270),
        (1772439270123456789, "ns", 1772439270123457),
        (1772439270123456500, "ns", 1772439270123456),
        (2500, "ns", 2),
        (3500, "ns", 4),
        (0.5, "us", 0),
    ],
)
def test_a_unit_that_is_told_decides(number: float, unit: str, instant: int) -> None:
    assert from_number(number, unit) == instant


@pytest.mark.parametrize(
    "number",
    [
        float("nan"),
        float("inf"),
        float("-inf"),
        1e300,
        10**400,
        10**5000,
        -62_135_596_801,
        Decimal("NaN"),
        Decimal("1e999999"),
        Decimal("1e99999999"),
        Decimal("-1e99999999"),
    ],
    ids=lambda number: hex(number)[:12] if isinstance(number, int) else None,
)
def test_numbers_beyond_the_years_1_to_9999_are_refused_in_plain_words(number: float | Decimal) -> None:
    with pytest.raises(ValueError, match="must lie in the years 1 to 9999"):
        from_number(number)


def test_an_unknown_unit_is_refused_with_those_that_are_known() -> None:
    with pytest.raises(ValueError, match="must be one of s, ms, us, ns, is 'minutes'"):
        from_number(1, "minutes")


@given(st.decimals(-(6 * 10**10), 25 * 10**10, places=9), st.sampled_from([None, *UNITS]))
@example(Decimal("99999999999.9999999999"), None)
@example(Decimal("1740902400.12345650001"), None)
@example(Decimal("5000000000.0000005"), "s")
def test_a_float_is_only_trusted_where_its_lost_digits_cannot_matter(number: Decimal, unit: str | None) -> None:
    assert from_float(float(number), unit) in {None, from_number(number, unit)}


@given(st.integers(0, 2**31 * 10**6))
def test_floats_with_six_digits_of_a_second_are_trusted_until_2038(instant: int) -> None:
    assert from_float(float(Decimal(instant).scaleb(-6)), "s") == instant


@pytest.mark.parametrize("instant", [FIRST - 1, LAST + 1, -(2**63)])
def test_an_instant_that_rfc_3339_cannot_write_is_refused(instant: int) -> None:
    with pytest.raises(ValueError, match="must lie in the years 1 to 9999"):
        format_time(instant)
