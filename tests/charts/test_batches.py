"""How a stream is cut into batches, and what other rows do in it, changes no verdict."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from charts.feeding import MINUTE, comparable, every_way, in_cuts, joined, judged, readings_of
from quietmill.charts.bank import NOTICES_AT_ONCE, Bank
from quietmill.model import COUNTS, NELSON, RECENT_POINTS, Cusum, Detector, Ewma, Notice, Outcome, Rule

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
    Detector(0.0, 1.0, cusum=Cusum(0.25, 3, 1.5, ceiling=2), points_kept=2, timed=False),
    Detector(0.0, 1.0, rules={Rule.SAME_SIDE: 4}, points_kept=1000, side="low", gap=3 * MINUTE),
    Detector(0.0, 1.0, cusum=Cusum(0.125, 4), points_kept=24, sequenced=True, sequence_size=256, side="high"),
]


def stream(count: int, seed: int) -> np.ndarray:
    """Return readings of all detectors with shifts, gaps, repetitions, late ones and a clock that is set back."""
    draw = np.random.default_rng(seed)
    values = draw.normal(size=count) + np.where(np.arange(count) % 90 > 60, 1.2, 0.0)
    readings = readings_of(values)
    readings["row"] = draw.integers(0, len(DETECTORS), count)
    readings["arrival"] = 10 * readings["time"]
    steady = (np.arange(count) >= count // 2) & (np.arange(count) < count - count // 5)
    readings["time"] += np.where(steady, 0, MINUTE * draw.choice([0, 0, 0, 0, 0, 12, -12], count))
    readings["time"][count // 2 :] -= count * MINUTE
    readings["sequence"] = (np.arange(count) + draw.choice([0, 0, 0, -20], count)) % 256
    for place in np.flatnonzero(~steady & (draw.random(count) < 0.1))[1:]:  # in another message what came just before
        for name in ("row", "time", "value", "sequence", "fingerprint"):
            readings[name][place] = readings[name][place - 1]
    return readings


def test_the_stream_has_something_of_everything() -> None:
    readings = stream(2000, 1)
    verdicts = Bank(DETECTORS).judge(readings)
    assert set(verdicts.outcomes.tolist()) == {Outcome.ACCEPTED, Outcome.LATE, Outcome.REPEATED}
    assert set(verdicts.notices["kind"].tolist()) == {Notice.RAISED, Notice.JOINED, Notice.RETURNED}
    assert len(verdicts.set_back) >= 2
    assert set(verdicts.points["row"].tolist()) == set(range(len(DETECTORS)))


@settings(max_examples=30)
@given(st.integers(0, 10**6), st.integers(2, 400))
def test_every_cut_and_interleaving_gives_the_same_verdicts(seed: int, count: int) -> None:
    first, *others = every_way(DETECTORS, stream(count, seed), seed)
    for other in others:
        assert other == first


def test_indices_point_into_the_batch() -> None:
    readings = stream(2000, 2)
    verdicts = Bank(DETECTORS).judge(readings)
    told = verdicts.points[verdicts.notices["point"]]
    assert verdicts.points["reading"].tolist() == np.flatnonzero(verdicts.outcomes == Outcome.ACCEPTED).tolist()
    assert verdicts.points["value"].tolist() == readings["value"][verdicts.points["reading"]].tolist()
    assert told["row"].tolist() == verdicts.notices["row"].tolist()
    assert joined([verdicts]).points.tobytes() == verdicts.points.tobytes()
    assert in_cuts(DETECTORS, readings, [7, 900]).notices.tobytes() == verdicts.notices.tobytes()


def test_a_row_alone_is_judged_as_among_others() -> None:
    readings = stream(2000, 5)
    together = {row: rest for row, *rest in comparable(readings, in_cuts(DETECTORS, readings, []))}
    for row, detector in enumerate(DETECTORS):
        own = readings[readings["row"] == row].copy()
        own["row"] = 0
        verdicts = Bank([detector]).judge(own)
        own["row"] = verdicts.points["row"] = verdicts.notices["row"] = row
        assert [rest for _, *rest in comparable(own, verdicts)] == [together[row]]


def test_verdicts_stay_as_they_were_given() -> None:
    bank = Bank(DETECTORS)
    batches = [stream(300, seed) for seed in range(8)]
    given = [bank.judge(batch) for batch in batches]
    before = [comparable(*pair) for pair in zip(batches, given, strict=True)]
    bank.judge(stream(3000, 9))
    assert [comparable(*pair) for pair in zip(batches, given, strict=True)] == before


def test_readings_are_not_touched() -> None:
    readings = stream(500, 7)
    before = readings.tobytes()
    in_cuts(DETECTORS, readings, [100])
    assert readings.tobytes() == before


def test_more_notices_than_the_walk_holds_at_once_lose_nothing() -> None:
    readings = readings_of(np.tile([5.0, 0.0], 3 * NOTICES_AT_ONCE))
    detector = Detector(0.0, 1.0, rules={Rule.BEYOND_LIMITS: 3}, quiet_points=1)
    verdicts = Bank([detector]).judge(readings)
    assert verdicts.notices["kind"].tolist() == [Notice.RAISED, Notice.RETURNED] * (3 * NOTICES_AT_ONCE)
    assert verdicts.points["number"][verdicts.notices["point"]].tolist() == list(range(1, len(readings) + 1))
    singly = in_cuts([detector], readings, range(1, len(readings)))
    assert comparable(readings, verdicts) == comparable(readings, singly)


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
