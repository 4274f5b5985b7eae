"""The bank's average run lengths in control, simulated, against values from outside.

Exact ones by Markov chain (Champ and Woodall 1987; Brook and Evans 1972), integral equation (Crowder 1987) or density
propagation, recomputed independently; simulated ones with their own standard error.
"""

import numpy as np
import pytest

from charts.feeding import readings_of
from quietmill.charts.bank import Bank
from quietmill.model import COUNTS, NELSON, Cusum, Detector, Ewma, Rule

EIGHT = {rule: COUNTS[rule][0] if rule in COUNTS else 0 for rule in NELSON}
WESTERN_ELECTRIC = {Rule.BEYOND_LIMITS: 3, Rule.TWO_OF_THREE: 0, Rule.FOUR_OF_FIVE: 0, Rule.SAME_SIDE: 8}
FIR = Cusum(0.5, 5, head_start=2.5)


def detector(rules: dict | None = None, ewma: Ewma | None = None, cusum: Cusum | None = None) -> Detector:
    return Detector(0.0, 1.0, rules=rules or {}, ewma=ewma, cusum=cusum, timed=False)


def run_lengths(judge: Detector, shift: float, count: int, seed: int) -> np.ndarray:
    """Return the first points at which a rule holds, of many rows alike."""
    bank, stream = Bank([judge] * count), np.random.default_rng(seed)
    found, alive = np.zeros(count, np.int64), np.arange(count)
    while len(alive):
        length = max(50, 200_000 // len(alive))
        readings = readings_of(stream.normal(shift, 1.0, len(alive) * length))
        readings["row"] = np.repeat(alive, length)
        points = bank.judge(readings).points
        hits = points[points["bits"] != 0]
        rows, places = np.unique(hits["row"], return_index=True)
        found[rows] = hits["number"][places]
        alive = alive[found[alive] == 0]
    return found


CASES = {
    # name: (detector, shift in sigma, ARL, its standard error, replicates)
    "beyond_limits": (detector({Rule.BEYOND_LIMITS: 3}), 0, 370.3983, 0, 8000),
    "beyond_limits at 1 sigma": (detector({Rule.BEYOND_LIMITS: 3}), 1, 43.8947, 0, 8000),
    "western_electric": (detector(WESTERN_ELECTRIC), 0, 91.7508, 0, 8000),
    "western_electric at 1 sigma": (detector(WESTERN_ELECTRIC), 1, 9.2219, 0, 8000),
    "all eight": (detector(EIGHT), 0, 73.5283, 0.0685, 8000),
    "all eight at 1 sigma": (detector(EIGHT), 1, 9.6115, 0.0107, 8000),
    "all eight, EWMA and CUSUM": (detector(EIGHT, Ewma(0.1, 2.814), Cusum(0.5, 5)), 0, 68.7664, 0.0642, 8000),
    "EWMA, exact limits": (detector(ewma=Ewma(0.1, 2.814)), 0, 486.4293, 0, 8000),
    "EWMA, asymptotic limits": (detector(ewma=Ewma(0.1, 2.814, exact=False)), 0, 499.5796, 0, 8000),
    "EWMA, exact limits, at half a sigma": (detector(ewma=Ewma(0.1, 2.814)), 0.5, 28.5124, 0, 8000),
    "CUSUM": (detector(cusum=Cusum(0.5, 5)), 0, 465.4435, 0, 8000),
    "CUSUM at 1 sigma": (detector(cusum=Cusum(0.5, 5)), 1, 10.376, 0, 8000),
    "CUSUM with head start": (detector(cusum=FIR), 0, 430.3908, 0, 8000),
    "CUSUM with head start at 1 sigma": (detector(cusum=FIR), 1, 6.3469, 0, 8000),
    "CUSUM and beyond_limits": (detector({Rule.BEYOND_LIMITS: 3}, cusum=Cusum(0.5, 5)), 0, 224.0087, 0, 8000),
}


@pytest.mark.parametrize("name", CASES)
def test_the_average_run_length_is_the_published_one(name: str) -> None:
    judge, shift, expected, error, count = CASES[name]
    found = run_lengths(judge, shift, count, seed=20_26)
    own = found.std(ddof=1) / count**0.5
    assert abs(found.mean() - expected) < 3 * (own**2 + error**2) ** 0.5


def test_the_default_detector_is_made_for_streams() -> None:
    """Own value: both arms as one Markov chain on a lattice (Brook and Evans 1972), halved steps, extrapolated."""
    judge = detector({Rule.BEYOND_LIMITS: 4}, cusum=Cusum(0.5, 8, ceiling=2))
    found = run_lengths(judge, 0, 4000, seed=20_26)
    assert abs(found.mean() - 5988) < 3 * found.std(ddof=1) / 4000**0.5
