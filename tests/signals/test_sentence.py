import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from quietmill.model import Ended, Notice, Rule
from quietmill.signals.sentence import SAYS, rounded
from signals.evidence import NAN, RAISED_AT, event, press, returned

DAY = 86_400_000_000
PATTERN = {"shift": NAN, "shift_sigma": NAN}


@pytest.mark.parametrize(
    ("started", "point", "notice", "sentence"),
    [
        (
            ["beyond_limits high"],
            {},
            {},
            "is high: 249.1 kN, upper control limit 246 kN (beyond_limits); up by about 6.2 kN since 08:11:00",
        ),
        (
            ["beyond_limits low", "cusum low"],
            {"value": 233.04},
            {"shift": -1.25},
            "is low: 233 kN, lower control limit 234 kN (beyond_limits, cusum); down by about 1.2 kN since 08:11:00",
        ),
        (
            ["same_side low"],
            {"value": 239.1},
            {"shift": -0.9, "onset_time": RAISED_AT - DAY},
            "runs low: 239.1 kN, centre 240 kN (same_side); down by about 0.9 kN since 2026-03-01 08:14:30",
        ),
        (
            ["ewma high"],
            {"value": 239.8},
            {"shift": 0.0412},
            "runs high: now back at 239.8 kN, centre 240 kN (ewma); up by about 0.041 kN since 08:11:00",
        ),
        (
            ["cusum high", "cusum low"],
            {"value": 240.2},
            {"shift": 2.0},
            "swings high and low: 240.2 kN, centre 240 kN (cusum); up by about 2 kN since 08:11:00",
        ),
        (["trend high"], {"value": 241.0}, PATTERN, "keeps rising: 241 kN, centre 240 kN (trend), since 08:11:00"),
        (["trend low"], {"value": 241.0}, PATTERN, "keeps falling: 241 kN, centre 240 kN (trend), since 08:11:00"),
        (
            ["stratification"],
            {"value": 240.4},
            PATTERN,
            "stays unusually close to its centre: 240.4 kN, centre 240 kN (stratification), since 08:11:00",
        ),
        (
            ["alternating"],
            {"value": 243.0},
            PATTERN,
            "goes up and down by turns: 243 kN, centre 240 kN (alternating), since 08:11:00",
        ),
        (
            ["spread high"],
            {"value": 240.2, "spread": 9.312, "spread_upper": 7.3718},
            PATTERN,
            "scatters more than usual: spread 9.3 kN, upper spread limit 7.4 kN (spread), since 08:11:00",
        ),
        (
            ["spread low"],
            {"value": 240.2, "spread": 0.312, "spread_lower": 0.4},
            PATTERN,
            "scatters less than usual: spread 0.3 kN, lower spread limit 0.4 kN (spread), since 08:11:00",
        ),
    ],
    ids=lambda value: ",".join(value) if isinstance(value, list) else "",
)
def test_a_raised_signal_says_how_it_is_how_much_and_since_when(
    started: list[str], point: dict, notice: dict, sentence: str
) -> None:
    assert event(*started, point=point, **notice).summary == f"press1.force {sentence}"


def test_patterns_that_start_together_are_told_together() -> None:
    summary = event("mixture", "spread high", point={"value": 243.0}, shift=NAN).summary
    assert "keeps away from its centre and scatters more than usual: 243 kN, centre 240 kN (mixture, spread)" in summary


def test_news_in_the_favourable_direction_are_called_good() -> None:
    good, bad = press(favourable="high"), press(favourable="low")
    assert event("cusum high", characteristic=good).summary.endswith("; this is good news")
    assert "good" not in event("cusum high", characteristic=bad).summary


def test_a_characteristic_without_a_unit_shows_bare_numbers() -> None:
    summary = event("cusum high", characteristic=press(unit=None)).summary
    assert summary == "press1.force runs high: 249.1, centre 240 (cusum); up by about 6.2 since 08:11:00"


@pytest.mark.parametrize(
    ("joined", "point", "sentence"),
    [
        (["ewma low"], {"value": 236.0}, "is low on average: 236 kN, centre 240 kN (ewma)"),
        (["beyond_limits low"], {"value": 231.0}, "leaves its control limits: 231 kN, lower control limit 234 kN"),
        (["same_side high", "trend high", "cusum high"], {}, "stays above its centre, keeps rising and has been high"),
    ],
    ids=lambda value: ",".join(value) if isinstance(value, list) else "",
)
def test_a_rule_that_joins_says_what_it_adds_and_to_which_signal(joined: list[str], point: dict, sentence: str) -> None:
    summary = event(*joined, point={"time": RAISED_AT + 30_000_000, **point}, kind=Notice.JOINED).summary
    assert summary.startswith(f"press1.force now also {sentence}")
    assert summary.endswith("; joins the signal of 08:14:30")


def test_a_quiet_signal_says_for_how_long_no_rule_held() -> None:
    over = "the signal of 08:14:30 is over"
    assert returned().summary == f"press1.force is quiet again at 240.3 kN: no rule has held for 8 points; {over}"
    assert "held for 1 point;" in returned(press(quiet_points=1)).summary


def test_every_way_to_end_has_a_sentence_of_its_own() -> None:
    endings = set(Ended) - {Ended.NOT_ENDED}
    assert len({returned(ended=ended).summary for ended in endings}) == len(endings)


def test_every_rule_has_words() -> None:
    assert set(SAYS) == set(Rule)


def test_a_value_hardly_beyond_its_limit_is_not_shown_as_the_limit() -> None:
    summary = event("beyond_limits high", point={"value": 246.0004}).summary
    assert "246.0004 kN, upper control limit 246 kN" in summary


@pytest.mark.parametrize(
    ("value", "sigma", "text"),
    [
        (249.10000000000002, 2.0, "249.1"),
        (-0.04, 2.0, "0"),
        (0.96, 20.0, "1"),
        (99.96, 2.0, "100"),
        (0.0031214, 0.00004, "0.003121"),
        (12_345_678.9, 3e5, "12345679"),
        (1_772_439_270.26, 2.0, "1772439270.3"),
        (3.217e-9, 1e-9, "3.2e-9"),
        (-6.0221e23, 1e20, "-6.0221e23"),
        (1e150, 1e-150, "1e150"),
    ],
)
def test_values_have_the_digits_that_their_sigma_is_worth(value: float, sigma: float, text: str) -> None:
    assert rounded(value, sigma) == text


@given(st.floats(-1e15, 1e15), st.floats(-12, 12))
def test_rounding_costs_at_most_a_twentieth_of_sigma(value: float, magnitude: float) -> None:
    sigma = 10**magnitude
    assume(abs(value) < 1e12 * sigma)
    assert abs(float(rounded(value, sigma)) - value) <= max(sigma / 20, abs(value) * 1e-15) * (1 + 1e-9)
