"""The compiled bank against the slow, exact reference, on series rich in ties, lines and turns."""

from math import isnan

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charts import reference
from charts.feeding import MINUTE, judged
from quietmill.model import (
    COUNTS,
    NELSON,
    RECENT_POINTS,
    Cusum,
    Detector,
    Ended,
    Ewma,
    Notice,
    Rule,
    Verdicts,
    rule_bits,
)

SIXTEENTHS = (0.0, 1.0)
TENTHS = (10.0, 0.1)


@st.composite
def detectors(draw: st.DrawFn, centre: float, sigma: float) -> Detector:
    rules = draw(st.sets(st.sampled_from(NELSON)))
    numbers = {
        Rule.BEYOND_LIMITS: st.sampled_from([2, 2.5, 3, 4]),
        Rule.SAME_SIDE: st.integers(2, 12),
        Rule.STRATIFICATION: st.integers(2, 16),
        Rule.MIXTURE: st.integers(2, 9),
    }
    ewma = draw(st.sampled_from([None, Ewma(0.25, 2.0), Ewma(0.1, 2.7, exact=False), Ewma(1.0, 3.0)]))
    cusum = draw(st.sampled_from([None, Cusum(0.5, 4), Cusum(0.25, 3, 1.5), Cusum(0.5, 2, ceiling=2), Cusum(1, 1)]))
    return Detector(
        centre,
        sigma,
        rules={rule: draw(numbers[rule]) if rule in COUNTS else 0 for rule in sorted(rules)},
        ewma=ewma,
        cusum=cusum,
        side=draw(st.sampled_from(["both", "both", "high", "low"])),
        spread_signals=draw(st.booleans()),
        gap=draw(st.sampled_from([0, 0, 5 * MINUTE])),
        quiet_points=draw(st.integers(1, 8)),
        points_kept=draw(st.sampled_from([1, 2, 5, 64])),
    )


@st.composite
def cases(draw: st.DrawFn) -> tuple[Detector, list[float], list[int]]:
    """A detector, a series on a grid on which lines and ties are exact, and times with some gaps."""
    centre, sigma = draw(st.sampled_from([SIXTEENTHS, TENTHS]))
    step = st.integers(-64, 64) if sigma == 1 else st.integers(-40, 40)
    near = st.sampled_from([-3, -2, -1, 0, 1, 2, 3]).map(lambda n: n * (16 if sigma == 1 else 10))
    grid = draw(st.lists(st.one_of(step, near), min_size=1, max_size=60))
    runs = draw(st.lists(st.tuples(st.integers(0, 59), st.integers(2, 14), st.integers(-24, 24)), max_size=3))
    for begin, length, slope in runs:  # stretches of trends, levels and ties
        for place in range(begin, min(begin + length, len(grid))):
            grid[place] = slope * (place - begin) // 4
    scale = 16 if sigma == 1 else 100
    values = [float(f"{centre + number / scale:.4f}") for number in grid]
    pauses = draw(st.lists(st.sampled_from([1, 1, 1, 1, 9]), min_size=len(values), max_size=len(values)))
    return draw(detectors(centre, sigma)), values, (np.cumsum(pauses) * MINUTE).tolist()


def about(value: float, wanted: float | None) -> bool:
    return isnan(value) if wanted is None else abs(value - wanted) < 1e-9 * max(1, abs(wanted))


def assert_statistics_agree(detector: Detector, verdicts: Verdicts, expected: list[reference.Point]) -> None:
    centre, sigma = detector.centre, detector.sigma
    for number, (point, wanted) in enumerate(zip(verdicts.points, expected, strict=True), start=1):
        assert int(point["number"]) == number
        assert int(point["bits"]) == sum(rule_bits(rule, side) for rule, side in wanted.holds), number
        for name, statistic in {
            "z": float(wanted.z),
            "centre": centre,
            "sigma": sigma,
            "lower": centre - detector.width * sigma,
            "upper": centre + detector.width * sigma,
            "spread": None if wanted.spread is None else float(wanted.spread) * sigma,
            "spread_lower": None,
            "spread_upper": reference.SPREAD_UPPER * sigma,
            "ewma": centre + float(wanted.ewma) * sigma if detector.ewma else None,
            "cusum_high": float(wanted.high) if detector.cusum else None,
            "cusum_low": float(wanted.low) if detector.cusum else None,
        }.items():
            assert about(point[name], statistic), (number, name)


def assert_episodes_agree(
    detector: Detector, verdicts: Verdicts, expected: list[reference.Point], times: list[int]
) -> None:
    told = [(number, point) for number, point in enumerate(expected, start=1) if point.notice]
    assert verdicts.points["number"][verdicts.notices["point"]].tolist() == [number for number, _ in told]
    for notice, (number, wanted) in zip(verdicts.notices, told, strict=True):
        assert Notice(int(notice["kind"])).name == wanted.notice, number
        assert int(notice["ended"]) == (Ended.QUIET if wanted.notice == "RETURNED" else Ended.NOT_ENDED)
        assert int(notice["joined"]) == sum(rule_bits(rule, side) for rule, side in wanted.joined)
        assert int(notice["members"]) == sum(rule_bits(rule, side) for rule, side in wanted.members)
        order = dict.fromkeys(rule for rule, _ in wanted.members)
        assert int(notice["order"]) == sum((rule + 1) << (4 * place) for place, rule in enumerate(order))
        assert int(notice["start"]) == times[0]
        assert (int(notice["raised_number"]), int(notice["onset_number"])) == (wanted.raised, wanted.onset)
        assert int(notice["raised_time"]) == times[wanted.raised - 1]
        assert int(notice["onset_time"]) == times[wanted.onset - 1]
        shift = None if wanted.shift_sigma is None else float(wanted.shift_sigma)
        assert about(notice["shift_sigma"], shift)
        assert about(notice["shift"], None if shift is None else shift * detector.sigma)
        assert int(notice["recent"]) == min(number, detector.points_kept, RECENT_POINTS)


def assert_agreement(detector: Detector, values: list[float], times: list[int]) -> None:
    verdicts = judged(detector, values, times)
    expected = reference.judge(values, detector, times)
    assert_statistics_agree(detector, verdicts, expected)
    assert_episodes_agree(detector, verdicts, expected, times)


@settings(max_examples=400)
@given(cases())
def test_the_bank_agrees_with_the_definitions(case: tuple[Detector, list[float], list[int]]) -> None:
    assert_agreement(*case)


@pytest.mark.parametrize("kept", [1, 2, 24, 64, 1000])
def test_on_a_long_series_that_drifts_the_points_kept_go_round(kept: int) -> None:
    draw = np.random.default_rng(kept)
    drift = np.where(np.arange(1300) % 400 < 250, 0, (np.arange(1300) % 400 - 250) / 60)
    values = [float(value) for value in np.round(16 * (draw.normal(size=1300) + drift)) / 16]
    detector = Detector(
        0.0, 1.0, rules={Rule.BEYOND_LIMITS: 4}, cusum=Cusum(0.125, 14, ceiling=1), quiet_points=4, points_kept=kept
    )
    times = (np.arange(1, 1301) * MINUTE).tolist()
    assert_agreement(detector, values, times)
    assert len(judged(detector, values, times).notices) > 10


@settings(max_examples=50)
@given(st.lists(st.sampled_from([-30, -20, -10, -5, 0, 5, 10, 20, 30]), min_size=1, max_size=40))
def test_lines_and_ties_are_told_where_values_are_large_against_their_sigma(steps: list[int]) -> None:
    """A million on a scale of thousandths: in binary each z is off by up to 1e-7, a hundred times a usual line."""
    values = [float(f"{1_000_000 + step / 10_000:.4f}") for step in steps]
    rules = {rule: {Rule.SAME_SIDE: 3, Rule.STRATIFICATION: 3, Rule.MIXTURE: 3}.get(rule, 0) for rule in NELSON}
    detector = Detector(1_000_000.0, 0.001, rules={**rules, Rule.BEYOND_LIMITS: 3})
    bits = judged(detector, values).points["bits"].tolist()
    wanted = reference.judge(values, detector)
    assert bits == [sum(rule_bits(rule, side) for rule, side in point.holds) for point in wanted]
