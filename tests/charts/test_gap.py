"""What a longer time between two points does, and what it leaves alone."""

from math import isnan

import pytest

from charts.feeding import MINUTE, judged
from quietmill.model import HIGH, LOW, NELSON, UNDIRECTED, Cusum, Detector, Ewma, Notice, Rule, rule_bits

GAP = 5 * MINUTE
WINDOWS = {
    # the shortest series at whose last point the rule holds, towards the high side
    Rule.SAME_SIDE: [1.0] * 9,
    Rule.TREND: [0.0, 1.0, 2.0, 3.0, 4.0, 5.0],
    Rule.ALTERNATING: [0.0, 1.0] * 7,
    Rule.TWO_OF_THREE: [2.5, 2.5],
    Rule.FOUR_OF_FIVE: [1.5] * 4,
    Rule.STRATIFICATION: [0.5, 0.0] * 7 + [0.5],
    Rule.MIXTURE: [1.5, -1.5] * 4,
    Rule.SPREAD: [0.0, 4.0],
}


def times_with(pause: int, count: int) -> list[int]:
    """Return times a minute apart, the last of them `pause` after the one before."""
    times = [place * MINUTE for place in range(count - 1)]
    return [*times, times[-1] + pause]


def last_bits(rule: Rule, sign: int, pause: int) -> int:
    values = [sign * value for value in WINDOWS[rule]]
    numbers = {Rule.SAME_SIDE: 9, Rule.STRATIFICATION: 15, Rule.MIXTURE: 8}
    rules = {rule: numbers.get(rule, 0)} if rule in NELSON else {}
    detector = Detector(0.0, 1.0, rules=rules, spread_signals=rule is Rule.SPREAD, gap=GAP)
    return int(judged(detector, values, times_with(pause, len(values))).points["bits"][-1])


@pytest.mark.parametrize("sign", [1, -1])
@pytest.mark.parametrize("rule", WINDOWS)
def test_a_window_does_not_reach_across_a_gap(rule: Rule, sign: int) -> None:
    side = HIGH if sign > 0 or rule in UNDIRECTED or rule is Rule.SPREAD else LOW
    assert last_bits(rule, sign, GAP) == rule_bits(rule, side)
    assert last_bits(rule, sign, GAP + 1) == 0


def test_no_moving_range_spans_a_gap() -> None:
    points = judged(Detector(0.0, 1.0, rules={Rule.BEYOND_LIMITS: 3}, gap=GAP), [1, 2, 4], [0, 1, GAP + 2]).points
    assert [isnan(spread) for spread in points["spread"].tolist()] == [True, False, True]


def test_ewma_and_cusum_go_on_across_a_gap() -> None:
    values, quiet, paused = [1.0, 2.0, 1.5, 2.5], [0, 1, 2, 3], [0, 1, GAP + 2, 3 * GAP]
    detector = Detector(0.0, 1.0, ewma=Ewma(0.25, 2.5), cusum=Cusum(0.5, 3), gap=GAP)
    one, other = (judged(detector, values, times).points for times in (quiet, paused))
    for name in ("bits", "ewma", "cusum_high", "cusum_low"):
        assert one[name].tolist() == other[name].tolist(), name


def test_quiet_points_are_counted_across_a_gap() -> None:
    detector = Detector(0.0, 1.0, rules={Rule.BEYOND_LIMITS: 3}, gap=GAP, quiet_points=2)
    notices = judged(detector, [4, 0, 0], [0, 1, 2 * GAP]).notices
    assert notices["kind"].tolist() == [Notice.RAISED, Notice.RETURNED]
