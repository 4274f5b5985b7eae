import numpy as np
import pytest

from quietmill.intake.screen import screen
from quietmill.model import READING, Outcome

ARRIVAL = 1_772_439_270_000_000
MINUTE = 60_000_000


def outcome_of(value: float = 240.0, time: int = ARRIVAL, centre: float = 240.0, sigma: float = 2.0) -> Outcome:
    readings = np.zeros(1, READING)
    readings["value"], readings["time"], readings["arrival"] = value, time, ARRIVAL
    return Outcome(screen(readings, np.array([centre]), np.array([sigma]))[0])


@pytest.mark.parametrize(
    ("time", "outcome"),
    [
        (ARRIVAL + 5 * MINUTE, Outcome.ACCEPTED),
        (ARRIVAL + 5 * MINUTE + 1, Outcome.FUTURE),
        (7_258_118_400_000_000, Outcome.FUTURE),  # 2200
        (ARRIVAL - 1, Outcome.ACCEPTED),
        (0, Outcome.ACCEPTED),  # 1970
        (-62_135_596_800_000_000, Outcome.ACCEPTED),  # the year 1
    ],
)
def test_only_times_more_than_five_minutes_after_arrival_are_future(time: int, outcome: Outcome) -> None:
    assert outcome_of(time=time) is outcome


@pytest.mark.parametrize(
    ("value", "outcome"),
    [
        (2e9, Outcome.ACCEPTED),
        (-2e9, Outcome.ACCEPTED),
        (2e9 + 1, Outcome.OUT_OF_RANGE),
        (-2e9 - 1, Outcome.OUT_OF_RANGE),
        (1.7e308, Outcome.OUT_OF_RANGE),
    ],
)
def test_only_values_more_than_1e9_sigma_from_the_centre_are_out_of_range(value: float, outcome: Outcome) -> None:
    assert outcome_of(value, centre=0.0) is outcome


def test_a_distance_that_no_double_holds_is_out_of_range() -> None:
    assert outcome_of(1.7e308, centre=-1.7e308) is Outcome.OUT_OF_RANGE


@pytest.mark.parametrize("value", [float("nan"), float("inf"), float("-inf")])
def test_what_is_not_finite_is_not_a_number_whatever_its_time(value: float) -> None:
    assert outcome_of(value, time=ARRIVAL + 6 * MINUTE) is Outcome.NOT_A_NUMBER


def test_each_reading_is_judged_by_its_own_characteristic() -> None:
    readings = np.zeros(2, READING)
    readings["value"] = 3.0
    outcomes = screen(readings, np.zeros(2), np.array([1.0, 1e-9]))
    assert outcomes.tolist() == [Outcome.ACCEPTED, Outcome.OUT_OF_RANGE]


def test_no_readings_have_no_outcomes() -> None:
    assert screen(np.zeros(0, READING), np.zeros(0), np.zeros(0)).shape == (0,)
