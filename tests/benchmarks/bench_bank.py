"""The bank beside one Python object per characteristic: `python tests/benchmarks/bench_bank.py`.

Both judge the eight rules, EWMA and CUSUM on the same readings in random order of rows. The target: at least 20 times
the object's speed at 10,000 rows, and a batch of a single reading no slower than the object.
"""

from collections import deque
from math import sqrt
from time import perf_counter

import numpy as np
from machine import machine, paired

from quietmill.charts.bank import Bank
from quietmill.model import COUNTS, NELSON, READING, Cusum, Detector, Ewma

EPS = 1e-9
CENTRE, SIGMA = 0.0, 1.0

DETECTOR = Detector(
    centre=CENTRE,
    sigma=SIGMA,
    rules={rule: COUNTS[rule][0] if rule in COUNTS else 0 for rule in NELSON},
    ewma=Ewma(0.1, 2.814),
    cusum=Cusum(0.5, 5.0),
    timed=True,
)


class ObjectDetector:
    """The same job as an ordinary Python object: arrival, eight rules, EWMA, CUSUM with its arms, kept points, episode.

    It returns what the bank writes a point, as a tuple. Only the dating of a change is left out, to its favour.
    """

    __slots__ = (
        "above1", "above2", "alternating", "arrived", "below1", "below2", "decay", "high", "high_arm", "kept", "low",
        "low_arm", "mean", "members", "mixture", "move", "number", "quiet", "side", "strat", "trend", "value", "z",
    )  # fmt: skip

    def __init__(self) -> None:
        self.number = self.side = self.trend = self.alternating = self.move = self.strat = self.mixture = 0
        self.above1 = self.above2 = self.below1 = self.below2 = self.members = self.quiet = 0
        self.z = self.value = self.mean = self.high = self.low = 0.0
        self.decay = 1.0
        self.arrived = (-1, -1, 0.0)
        self.high_arm = self.low_arm = (0, 0, 0, 0.0, 0.0)
        self.kept: deque[tuple[int, float, float]] = deque(maxlen=64)

    def judge(self, message: int, time: int, value: float) -> tuple[object, ...] | None:
        last_message, last_time, last_value = self.arrived
        if time < last_time or (time == last_time and message != last_message and value == last_value):
            return None
        self.arrived = (message, time, value)
        deviation = value - CENTRE
        z = deviation / SIGMA
        spread = abs(value - self.value) if self.number else None
        bits = 0
        if abs(z) - 3 > EPS:
            bits |= 1
        self.side = max(self.side, 0) + 1 if z > EPS else min(self.side, 0) - 1 if -z > EPS else 0
        if abs(self.side) >= 9:
            bits |= 2
        move = 0 if not self.number else 1 if z - self.z > EPS else -1 if self.z - z > EPS else 0
        self.trend = max(self.trend, 1) + 1 if move > 0 else min(self.trend, -1) - 1 if move < 0 else 0
        if abs(self.trend) >= 6:
            bits |= 4
        self.alternating = 1 if move == 0 else self.alternating + 1 if move == -self.move else 2
        self.move = move
        if self.alternating >= 14:
            bits |= 8
        self.above2 = (self.above2 << 1 | (z - 2 > EPS)) & 7
        self.below2 = (self.below2 << 1 | (-z - 2 > EPS)) & 7
        if (self.above2 & 1 and self.above2 > 1) or (self.below2 & 1 and self.below2 > 1):
            bits |= 16
        self.above1 = (self.above1 << 1 | (z - 1 > EPS)) & 31
        self.below1 = (self.below1 << 1 | (-z - 1 > EPS)) & 31
        if (self.above1 & 1 and self.above1.bit_count() >= 4) or (self.below1 & 1 and self.below1.bit_count() >= 4):
            bits |= 32
        self.strat = self.strat + 1 if 1 - abs(z) > EPS else 0
        if self.strat >= 15:
            bits |= 64
        self.mixture = self.mixture + 1 if abs(z) - 1 > EPS else 0
        if self.mixture >= 8:
            bits |= 128
        self.mean = 0.1 * z + 0.9 * self.mean
        self.decay *= 0.81
        if abs(self.mean) - 2.814 * sqrt(0.1 / 1.9 * (1 - self.decay)) > EPS:
            bits |= 256
        self.number += 1
        self.high = max(0.0, self.high + z - 0.5)
        if self.high:
            number, begin, count, total, total_z = (
                self.high_arm if self.high_arm[2] else (self.number, time, 0, 0.0, 0.0)
            )
            self.high_arm = (number, begin, count + 1, total + deviation, total_z + z)
        else:
            self.high_arm = (0, 0, 0, 0.0, 0.0)
        self.low = max(0.0, self.low - z - 0.5)
        if self.low:
            fresh = (self.number, time, 0, 0.0, 0.0)
            number, begin, count, total, total_z = self.low_arm if self.low_arm[2] else fresh
            self.low_arm = (number, begin, count + 1, total + deviation, total_z + z)
        else:
            self.low_arm = (0, 0, 0, 0.0, 0.0)
        if self.high - 5 > EPS or self.low - 5 > EPS:
            bits |= 512
        self.z = z
        self.value = value
        self.kept.append((time, value, z))
        if bits:
            self.quiet = 0
            self.members |= bits
        elif self.members:
            self.quiet += 1
            if self.quiet == 8:
                self.members = 0
        return (
            self.number, time, bits, value, CENTRE, SIGMA, z, CENTRE - 3 * SIGMA, CENTRE + 3 * SIGMA, spread, None,
            3.6866 * SIGMA, CENTRE + self.mean * SIGMA, self.high, self.low,
        )  # fmt: skip


def readings_of(rows: int, count: int) -> np.ndarray:
    stream = np.random.default_rng(12)
    readings = np.zeros(count, READING)
    readings["row"] = stream.integers(0, rows, count)
    readings["time"] = readings["message"] = np.arange(count)
    readings["value"] = stream.normal(size=count)
    return readings


def bank_rate(rows: int, count: int, batch: int) -> float:
    bank, readings = Bank([DETECTOR] * rows), readings_of(rows, count)
    bank.judge(readings[:1].copy())
    begin = perf_counter()
    for start in range(0, count, batch):
        bank.judge(readings[start : start + batch])
    return count / (perf_counter() - begin)


def object_rate(rows: int, count: int) -> float:
    detectors = [ObjectDetector() for _ in range(rows)]
    readings = readings_of(rows, count)
    columns = [readings[name].tolist() for name in ("row", "message", "time", "value")]
    begin = perf_counter()
    for row, message, time, value in zip(*columns, strict=True):
        detectors[row].judge(message, time, value)
    return count / (perf_counter() - begin)


def main() -> None:
    print(machine())
    print(f"{'rows':>8} {'batch':>7} {'bank/s':>12} {'object/s':>12} {'ratio':>8}")
    for rows in (1, 100, 10_000, 100_000):
        ours, theirs, ratio = paired(
            lambda rows=rows: bank_rate(rows, 2_000_000, 10_000), lambda rows=rows: object_rate(rows, 200_000)
        )
        print(f"{rows:>8,} {10_000:>7,} {ours:>12,.0f} {theirs:>12,.0f} {ratio:>8.1f}")
    ours, theirs, ratio = paired(lambda: bank_rate(1, 50_000, 1), lambda: object_rate(1, 50_000))
    print(f"{1:>8,} {1:>7,} {ours:>12,.0f} {theirs:>12,.0f} {ratio:>8.2f}")


if __name__ == "__main__":
    main()
