"""How a stream is cut into batches, and what other rows do in it, changes no verdict."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charts.feeding import comparable, every_way, in_cuts, judged, readings_of
from quietmill.charts.bank import NOTICES_AT_ONCE, Bank
from quietmill.model import COUNTS, NELSON, RECENT_POINTS, Cusum, Detector, Ewma, Notice, Rule

EVERYTHING = Detector(
    0.0,
    1.0,
    rules={rule: COUNTS[rule][0] if rule in COUNTS else 0 for rule in NELSON},
    ewma=Ewma(0.1, 2.814),
    cusum=Cusum(0.5, 5),
    spread_signals=True,
    quiet_points=3,
)
DETECTORS = [
    EVERYTHING,
    Detector(0.0, 1.0, rules={Rule.BEYOND_LIMITS: 2}, points_kept=1, quiet_points=1),
    Detector(0.0, 1.0, cusum=Cusum(0.25, 3, 1.5, ceiling=2), points_kept=2),
    Detector(0.0, 1.0, rules={Rule.SAME_SIDE: 4}, points_kept=1000, side="low"),
]


def stream(count: int, seed: int) -> np.ndarray:
    draw = np.random.default_rng(seed)
    values = draw.normal(size=count) + np.where(np.arange(count) % 90 > 60, 1.2, 0.0)
    readings = readings_of(values)
    readings["row"] = draw.integers(0, len(DETECTORS), count)
    return readings


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 10**6), st.integers(2, 300))
def test_every_cut_and_interleaving_gives_the_same_verdicts(seed: int, count: int) -> None:
    first, *others = (comparable(verdicts) for verdicts in every_way(DETECTORS, stream(count, seed), seed))
    for other in others:
        assert other == first


def test_a_row_alone_is_judged_as_among_others() -> None:
    readings = stream(2000, 5)
    together = {row: rest for row, *rest in comparable(in_cuts(DETECTORS, readings, []))}
    for row, detector in enumerate(DETECTORS):
        own = readings[readings["row"] == row].copy()
        own["row"] = 0
        verdicts = Bank([detector]).judge(own)
        verdicts.points["row"] = row
        verdicts.notices["row"] = row
        assert [rest for _, *rest in comparable(verdicts)] == [together[row]]


def test_readings_are_not_touched() -> None:
    readings = stream(500, 7)
    before = readings.tobytes()
    in_cuts(DETECTORS, readings, [100])
    assert readings.tobytes() == before


def test_more_notices_than_the_walk_holds_at_once_lose_nothing() -> None:
    values = np.tile([5.0, 0.0], 3 * NOTICES_AT_ONCE)
    detector = Detector(0.0, 1.0, rules={Rule.BEYOND_LIMITS: 3}, quiet_points=1)
    verdicts = judged(detector, values)
    assert verdicts.notices["kind"].tolist() == [Notice.RAISED, Notice.RETURNED] * (3 * NOTICES_AT_ONCE)
    assert verdicts.points["number"][verdicts.notices["point"]].tolist() == list(range(1, len(values) + 1))


@pytest.mark.parametrize("kept", [1, 2, 24, 64, 1000])
def test_an_event_shows_the_last_points_as_far_as_they_are_kept(kept: int) -> None:
    values = [*np.linspace(-0.5, 0.5, 99), 9.0]
    verdicts = judged(Detector(0.0, 1.0, rules={Rule.BEYOND_LIMITS: 3}, points_kept=kept), values)
    notice, shown = verdicts.notices[0], verdicts.recent[0]
    count = min(kept, RECENT_POINTS)
    assert int(notice["recent"]) == count
    assert shown["number"][:count].tolist() == list(range(101 - count, 101))
    assert shown["value"][:count].tolist() == values[-count:]


def test_an_empty_batch_says_nothing() -> None:
    verdicts = Bank(DETECTORS).judge(readings_of([]))
    assert [len(part) for part in verdicts] == [0, 0, 0, 0, 0]


def test_a_bank_takes_no_memory_as_it_judges() -> None:
    bank = Bank(DETECTORS)
    sizes = [array.nbytes for array in (bank.rows, bank.state, bank.pool)]
    for seed in range(20):
        bank.judge(stream(2000, seed))
    assert [array.nbytes for array in (bank.rows, bank.state, bank.pool)] == sizes
