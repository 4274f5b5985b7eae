"""When a change began and how large it is: a sentence an edge. Values stand in sigmas unless they say otherwise."""

from collections.abc import Sequence
from math import isnan

import numpy as np
import pytest

from charts.feeding import MINUTE, judged
from quietmill.model import Cusum, Detector, Notice, Rule, Verdicts

BEYOND = {Rule.BEYOND_LIMITS: 3.0}


def raised(verdicts: Verdicts) -> list[tuple[int, int, float]]:
    """Return number of the point, number of the onset and shift in sigmas of every signal raised."""
    notices = verdicts.notices[verdicts.notices["kind"] == Notice.RAISED]
    return list(
        zip(
            notices["raised_number"].tolist(),
            notices["onset_number"].tolist(),
            notices["shift_sigma"].tolist(),
            strict=True,
        )
    )


def raised_by(detector: Detector, values: Sequence[float]) -> list[tuple[int, int, float]]:
    return raised(judged(detector, values))


def test_the_onset_is_the_most_likely_change_of_the_mean() -> None:
    assert raised_by(Detector(0.0, 1.0, rules=BEYOND), [0, 0, 2, 2, 3.5]) == [(5, 3, 2.5)]


def test_of_equally_likely_onsets_the_latest_counts() -> None:
    assert raised_by(Detector(0.0, 1.0, rules=BEYOND), [2, 2, 0, 4]) == [(4, 4, 4.0)]


def test_a_tie_on_paper_that_binary_fractions_break_is_a_tie() -> None:
    """Twelve sigma over four points are as likely as six over one; summed in binary the four seem likelier."""
    [(number, onset, shift)] = raised_by(Detector(10.0, 0.1, rules=BEYOND), [10.3, 10.3, 10.0, 10.6])
    assert (number, onset, round(shift, 9)) == (4, 4, 6.0)


def test_the_mean_since_the_onset_has_the_sign_of_the_signal() -> None:
    assert raised_by(Detector(0.0, 1.0, rules=BEYOND), [*[-2.5] * 10, 3.5]) == [(11, 11, 3.5)]
    assert raised_by(Detector(0.0, 1.0, rules=BEYOND), [*[2.5] * 10, -3.5]) == [(11, 11, -3.5)]


def test_no_onset_lies_before_the_return_of_the_episode_before() -> None:
    detector = Detector(0.0, 1.0, rules=BEYOND, quiet_points=2)
    assert raised_by(detector, [4, 2.5, 2.5, 2.5, 4]) == [(1, 1, 4.0), (5, 4, 3.25)]


def test_no_onset_lies_before_the_points_kept() -> None:
    values = [2.5] * 9 + [3.5]
    for kept, onset in ((1, 10), (3, 8), (64, 1)):
        assert raised_by(Detector(0.0, 1.0, rules=BEYOND, points_kept=kept), values)[0][:2] == (10, onset)


def test_a_cusum_looks_no_further_back_than_the_last_zero_of_its_arm() -> None:
    values = [2, 2, -2.5, *[0.75] * 21]  # from the first point on the change would be likelier
    assert raised_by(Detector(0.0, 1.0, cusum=Cusum(0.5, 5)), values) == [(24, 4, 0.75)]


def test_an_arm_remembers_its_last_zero_longer_than_points_are_kept() -> None:
    detector = Detector(100.0, 2.0, cusum=Cusum(0.5, 5), points_kept=4)
    verdicts = judged(detector, [100.0, *[101.5] * 21])
    notice = verdicts.notices[0]
    assert raised(verdicts) == [(22, 2, 0.75)]
    assert (int(notice["onset_time"]), float(notice["shift"])) == (MINUTE, 1.5)


def test_an_arm_that_was_never_zero_looks_back_to_the_start() -> None:
    detector = Detector(0.0, 1.0, cusum=Cusum(0.25, 3, head_start=1.5), points_kept=2)
    assert raised_by(detector, [0.5] * 8) == [(7, 1, 0.5)]


def test_beside_another_rule_on_the_level_the_zero_of_the_arm_is_no_bound() -> None:
    values = [3, -0.5, *[2.5] * 2, 3.5]
    assert raised_by(Detector(0.0, 1.0, cusum=Cusum(3, 0.25)), values) == [(5, 5, 3.5)]
    assert raised_by(Detector(0.0, 1.0, rules=BEYOND, cusum=Cusum(3, 0.25)), values) == [(5, 1, 2.2)]


@pytest.mark.parametrize(
    ("rule", "number", "values", "onset"),
    [
        (Rule.TREND, 0, [0.5, 0, 0.25, 0.5, 0.75, 1, 1.25], 2),
        (Rule.ALTERNATING, 0, [0.5, 0.5, *[0, 0.25] * 6, 0], 2),
        (Rule.STRATIFICATION, 5, [1, 0.5, 0, 0.5, 0, 0], 2),
        (Rule.MIXTURE, 4, [0, 1.5, -1.5, 1.5, -1.5], 2),
    ],
)
def test_the_onset_of_a_pattern_is_the_first_point_of_its_window(
    rule: Rule, number: int, values: list[float], onset: int
) -> None:
    [(at, found, shift)] = raised_by(Detector(0.0, 1.0, rules={rule: number}), values)
    assert (at, found) == (len(values), onset)
    assert isnan(shift)


def test_the_onset_of_a_wide_range_is_the_first_of_its_two_points() -> None:
    [(number, onset, shift)] = raised_by(Detector(0.0, 1.0, spread_signals=True), [0, 0, 2, -2])
    assert (number, onset) == (4, 3)
    assert isnan(shift)


def test_a_rule_on_the_level_decides_before_a_pattern() -> None:
    rules = {Rule.TREND: 0, Rule.BEYOND_LIMITS: 3.0}
    assert raised_by(Detector(0.0, 1.0, rules=rules), [-1, -0.5, 0, 0.5, 1, 4]) == [(6, 6, 4.0)]


def test_the_onset_stays_as_it_was_raised() -> None:
    detector = Detector(0.0, 1.0, rules={Rule.BEYOND_LIMITS: 3.0, Rule.TWO_OF_THREE: 0}, quiet_points=2)
    notices = judged(detector, [0, 4, 2.5, 0, 0]).notices
    assert notices["kind"].tolist() == [Notice.RAISED, Notice.JOINED, Notice.RETURNED]
    for name in ("onset_number", "onset_time", "shift", "shift_sigma", "raised_number"):
        assert len(np.unique(notices[name])) == 1, name
