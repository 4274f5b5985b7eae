"""Which readings are news: a sentence an edge."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st

from charts.arrivals import Reading, outcomes_of
from charts.feeding import readings_of
from quietmill.charts.bank import Bank
from quietmill.model import NO_TIME, READING, Detector, Outcome, Rule

RULES = {Rule.BEYOND_LIMITS: 3.0}
SECOND = 1_000_000
A, L, R = Outcome.ACCEPTED, Outcome.LATE, Outcome.REPEATED


def timed(*readings: tuple[int, float, int]) -> list[Outcome]:
    """Judge readings given as (seconds, value, message)."""
    batch = readings_of([value for _, value, _ in readings])
    batch["time"] = [second * SECOND for second, _, _ in readings]
    batch["message"] = [message for _, _, message in readings]
    return outcomes(Bank([Detector(0.0, 1.0, rules=RULES)]), batch)


def counted(numbers: list[int], size: int = 0) -> list[Outcome]:
    """Judge readings with a counter of their own, all with the same time."""
    batch = readings_of(np.zeros(len(numbers)), times=[0] * len(numbers))
    batch["sequence"] = numbers
    detector = Detector(0.0, 1.0, rules=RULES, sequenced=True, sequence_size=size)
    return outcomes(Bank([detector]), batch)


def outcomes(bank: Bank, batch: np.ndarray) -> list[Outcome]:
    return [Outcome(outcome) for outcome in bank.judge(batch).outcomes.tolist()]


def test_a_reading_older_than_the_last_accepted_one_is_late() -> None:
    assert timed((10, 1.0, 0), (9, 2.0, 1), (10, 2.0, 2), (11, 1.0, 3)) == [A, L, A, A]


def test_the_same_time_and_value_in_another_message_is_repeated() -> None:
    assert timed((10, 1.0, 0), (10, 1.0, 1)) == [A, R]


def test_the_same_time_with_another_value_is_not_repeated() -> None:
    assert timed((10, 1.0, 0), (10, 1.5, 1)) == [A, A]


def test_readings_of_one_message_may_share_a_time_and_a_value() -> None:
    assert timed((10, 1.0, 0), (10, 1.0, 0), (10, 1.0, 1)) == [A, A, R]


def test_a_refused_reading_leaves_no_trace() -> None:
    assert timed((10, 1.0, 0), (5, 1.0, 1), (7, 1.0, 2), (10, 1.0, 3), (11, 1.0, 4)) == [A, L, L, R, A]


def test_readings_without_a_time_of_their_own_are_never_late_or_repeated() -> None:
    batch = readings_of([1.0, 1.0, 1.0], times=[10, 10, 5])
    assert outcomes(Bank([Detector(0.0, 1.0, rules=RULES, timed=False)]), batch) == [A, A, A]


def test_a_counter_decides_instead_of_the_time() -> None:
    assert counted([5, 6, 6, 4, 7]) == [A, A, R, L, A]


def test_a_counter_that_falls_by_more_than_a_thousand_has_started_again() -> None:
    assert counted([5000, 4000]) == [A, L]
    assert counted([5000, 3999]) == [A, A]


def test_a_counter_that_falls_by_more_than_half_of_its_size_has_wrapped() -> None:
    assert counted([200, 72], size=256) == [A, L]
    assert counted([200, 71], size=256) == [A, A]
    assert counted([255, 0, 1], size=256) == [A, A, A]


def test_without_the_counter_in_the_data_the_time_decides() -> None:
    batch = readings_of([1.0, 1.0, 2.0, 3.0], times=[10, 10, 9, 11])
    detector = Detector(0.0, 1.0, rules=RULES, sequenced=True)
    assert batch["sequence"].tolist() == [NO_TIME] * 4
    assert outcomes(Bank([detector]), batch) == [A, R, L, A]


def set_back(
    count: int, arrival_step: int, time_step: int = 10, arrivals: bool = True
) -> tuple[list[Outcome], list[int]]:
    """Judge a reading at 10,000 s, then `count` late ones from 1,000 s on that arrive `arrival_step` s apart."""
    batch = readings_of(np.arange(count + 1.0))
    batch["time"] = [10_000 * SECOND, *((1000 + time_step * place) * SECOND for place in range(count))]
    if arrivals:
        batch["arrival"] = [20_000 * SECOND + arrival_step * SECOND * place for place in range(count + 1)]
    verdicts = Bank([Detector(0.0, 1.0, rules=RULES)]).judge(batch)
    return [Outcome(outcome) for outcome in verdicts.outcomes.tolist()], verdicts.set_back.tolist()


def test_the_twentieth_late_reading_that_arrives_at_the_pace_of_its_times_sets_the_clock_back() -> None:
    found, marks = set_back(25, arrival_step=10)
    assert found == [A] + [L] * 19 + [A] * 6
    assert marks == [20]


def test_half_the_pace_is_enough_and_less_is_a_backlog() -> None:
    assert set_back(25, arrival_step=5)[0] == [A] + [L] * 19 + [A] * 6
    assert set_back(25, arrival_step=4) == ([A] + [L] * 25, [])


def test_times_that_do_not_rise_set_no_clock_back() -> None:
    assert set_back(40, arrival_step=10, time_step=0) == ([A] + [L] * 40, [])


def test_without_arrivals_no_clock_is_set_back() -> None:
    assert set_back(40, arrival_step=10, arrivals=False) == ([A] + [L] * 40, [])


def test_a_backlog_that_comes_as_fast_as_it_can_still_sets_the_clock_back_once_its_pace_is_real() -> None:
    batch = readings_of(np.arange(40.0), times=[10_000 * SECOND, *(1000 * SECOND + 10 * SECOND * n for n in range(39))])
    arrivals = [0, *range(25), *(24 + 30 * n for n in range(1, 15))]
    batch["arrival"] = [20_000 * SECOND + arrival * SECOND for arrival in arrivals]
    verdicts = Bank([Detector(0.0, 1.0, rules=RULES)]).judge(batch)
    # from the first late reading on: 24 s + 30 s a reading against half of 240 s + 10 s a reading
    assert verdicts.set_back.tolist() == [29]
    assert verdicts.outcomes.tolist() == [A] + [L] * 28 + [A] * 11


def test_an_accepted_reading_ends_the_late_ones_in_a_row() -> None:
    times = [10_000, *range(1000, 1190, 10), 10_001, *range(1190, 1380, 10)]
    batch = readings_of(np.arange(40.0), times=[time * SECOND for time in times])
    batch["arrival"] = batch["time"][0] + np.arange(40) * 10 * SECOND
    assert outcomes(Bank([Detector(0.0, 1.0, rules=RULES)]), batch) == [A] + [L] * 19 + [A] + [L] * 19


@st.composite
def arriving(draw: st.DrawFn) -> tuple[Detector, list[Reading]]:
    """Readings of a sender whose clock and counter halt, jump and repeat, and that sends old ones again."""
    detector = Detector(
        0.0,
        1.0,
        rules=RULES,
        timed=draw(st.integers(0, 9)) > 0,
        sequenced=draw(st.integers(0, 3)) == 0,
        sequence_size=draw(st.sampled_from([0, 0, 15, 256, 65536])),
    )
    clock = st.sampled_from([-2, -1, 0, 0, 1, 1, 2])
    counter = st.sampled_from([0, 1, 1, 1, -1, -7, -8, -128, -129, -1000, -1001])
    readings = [Reading(1000, 0, 0, 5000, draw(st.integers(0, 3000)))]
    for _ in range(draw(st.integers(1, 12))):  # stretches: a jump, then an even pace, or none
        time, message, arrival, sequence = readings[-1].time, *readings[-1][2:]
        time += draw(st.sampled_from([0, 0, -1, -5, -60]))
        pace, delay, even = draw(st.integers(1, 4)), draw(st.integers(0, 2)), draw(st.booleans())
        for _ in range(draw(st.integers(1, 28))):
            time += pace if even else draw(clock)
            sequence += 1 if even else draw(counter)
            message += 1 if even else draw(st.integers(0, 1))
            arrival += delay
            fingerprint = 0 if even else draw(st.integers(0, 1))
            readings.append(Reading(time, fingerprint, message, arrival, sequence))
    return detector, readings


@settings(max_examples=150)
@given(arriving())
def test_outcomes_agree_with_the_definitions(case: tuple[Detector, list[Reading]]) -> None:
    detector, readings = case
    batch = np.zeros(len(readings), READING)
    for name, column in zip(Reading._fields, zip(*readings, strict=True), strict=True):
        batch[name] = column
    verdicts = Bank([detector]).judge(batch)
    found, set_back = outcomes_of(readings, detector)
    assert verdicts.outcomes.tolist() == found
    assert verdicts.set_back.tolist() == set_back
