"""The compiled bank against the slow, exact reference, on series rich in ties, lines and turns."""

from math import isnan

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charts import reference
from charts.feeding import MINUTE, judged
from quietmill.model import COUNTS, NELSON, Cusum, Detector, Ewma, Notice, Rule, rule_bits

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
    return draw(detectors(centre, sigma)), values, np.cumsum(pauses).__mul__(MINUTE).tolist()


@settings(max_examples=400, deadline=None)
@given(cases())
def test_the_bank_agrees_with_the_definitions(case: tuple[Detector, list[float], list[int]]) -> None:
    detector, values, times = case
    verdicts = judged(detector, values, times)
    expected = reference.judge(values, detector, times)
    notices = {int(verdicts.points["number"][notice["point"]]): notice for notice in verdicts.notices}
    for number, (point, wanted) in enumerate(zip(verdicts.points, expected, strict=True), start=1):
        assert int(point["bits"]) == sum(rule_bits(rule, side) for rule, side in wanted.holds), number
        assert abs(point["z"] - float(wanted.z)) < 1e-9
        if detector.ewma is not None:
            assert abs((point["ewma"] - detector.centre) / detector.sigma - float(wanted.ewma)) < 1e-8
        if detector.cusum is not None:
            assert abs(point["cusum_high"] - float(wanted.high)) < 1e-8
            assert abs(point["cusum_low"] - float(wanted.low)) < 1e-8
        notice = notices.pop(number, None)
        assert (Notice(int(notice["kind"])).name if notice is not None else "") == wanted.notice, number
        if notice is not None:
            assert int(notice["joined"]) == sum(rule_bits(rule, side) for rule, side in wanted.joined)
        if wanted.notice == "RAISED":
            assert int(notice["onset_number"]) == wanted.onset
            assert int(notice["onset_time"]) == times[wanted.onset - 1]
            if wanted.shift_sigma is None:
                assert isnan(notice["shift"])
                assert isnan(notice["shift_sigma"])
            else:
                assert abs(notice["shift_sigma"] - float(wanted.shift_sigma)) < 1e-8
                assert abs(notice["shift"] - float(wanted.shift_sigma) * detector.sigma) < 1e-8
    assert not notices


@pytest.mark.parametrize(("centre", "sigma"), [(10.0, 0.1), (10.0, 0.3), (5.6, 0.12), (8.7, 0.08)])
def test_onsets_that_tie_on_paper_tie_in_binary_and_the_latest_counts(centre: float, sigma: float) -> None:
    """One point at 2 sigma, and four at 1 on average, are equally likely changes; binary fractions told them apart."""
    values = [round(centre + z * sigma, 6) for z in (1, 0.5, 0.5, 2)]
    detector = Detector(centre, sigma, rules={Rule.SAME_SIDE: 4})
    assert judged(detector, values).notices["onset_number"].tolist() == [4]
    assert [point.onset for point in reference.judge(values, detector) if point.notice] == [4]
