"""State that is carried for ever stays exact and fast."""

from math import isnan, sqrt

import numpy as np
import pytest

from charts.feeding import judged, readings_of
from quietmill.charts.bank import Bank
from quietmill.charts.layout import STATE
from quietmill.model import Cusum, Detector, Ewma

TINY = np.finfo(np.float64).tiny
DETECTOR = Detector(0.0, 1.0, ewma=Ewma(0.05, 2.6), cusum=Cusum(0.5, 5))


def test_points_on_the_centre_after_an_excursion_leave_no_denormal_numbers() -> None:
    bank = Bank([DETECTOR])
    bank.judge(readings_of([3.0, -2.0, *[0.0] * 200_000]))
    for name in STATE.fields or ():
        if bank.state.dtype[name].kind == "f":
            value = abs(float(bank.state[name][0]))
            assert value == 0 or isnan(value) or value >= TINY, name


def test_the_limits_of_an_ewma_become_asymptotic_and_stay() -> None:
    bank = Bank([DETECTOR])
    bank.judge(readings_of(np.zeros(2000)))
    assert bank.state["decay"][0] == 0
    asymptotic = Bank([Detector(0.0, 1.0, ewma=Ewma(0.05, 2.6, exact=False))])
    values = np.random.default_rng(4).normal(size=5000)
    exact = Bank([Detector(0.0, 1.0, ewma=Ewma(0.05, 2.6))])
    late = slice(1000, None)
    one, other = asymptotic.judge(readings_of(values)).points, exact.judge(readings_of(values)).points
    assert one["bits"][late].tolist() == other["bits"][late].tolist()


@pytest.mark.parametrize(("factor", "signals"), [(1 + 1e-7, True), (1 - 1e-7, False)])
def test_the_limits_of_an_ewma_are_exact_at_every_point(factor: float, signals: bool) -> None:
    """A series made so that the average follows its limit just outside, or just inside."""
    lam, width, average, values = 0.05, 2.6, 0.0, []
    for t in range(1, 500):
        wanted = factor * width * sqrt(lam / (2 - lam) * (1 - (1 - lam) ** (2 * t)))
        values.append((wanted - (1 - lam) * average) / lam)
        average = wanted
    bits = judged(Detector(0.0, 1.0, ewma=Ewma(lam, width)), values).points["bits"]
    assert ((bits != 0) == signals).all()


def test_a_ceiling_bounds_how_long_a_sum_takes_to_come_back() -> None:
    bank = Bank([Detector(0.0, 1.0, cusum=Cusum(0.5, 8, ceiling=2))])
    points = bank.judge(readings_of([*[5.0] * 1000, *[0.0] * 20])).points
    assert points["cusum_high"].max() == 16
    assert points["bits"][-5:].tolist() == [0] * 5
