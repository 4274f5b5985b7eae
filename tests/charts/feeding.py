"""Series into the bank, every way: at once, singly, in random cuts, mixed with other rows."""

import itertools
import random
from collections.abc import Sequence

import numpy as np

from quietmill.charts.bank import Bank
from quietmill.model import NO_TIME, NOTICE, POINT, READING, Detector, Verdicts

MINUTE = 60_000_000


def readings_of(values: Sequence[float], row: int = 0, times: Sequence[int] | None = None) -> np.ndarray:
    """Return a series as readings a minute apart, each a message of its own."""
    readings = np.zeros(len(values), READING)
    readings["row"] = row
    readings["value"] = values
    readings["time"] = np.arange(len(values)) * MINUTE if times is None else times
    readings["message"] = np.arange(len(values)) * 1000 + row
    readings["arrival"] = readings["sequence"] = NO_TIME
    readings["fingerprint"] = readings["value"].view(np.uint64)
    return readings


def judged(detector: Detector, values: Sequence[float], times: Sequence[int] | None = None) -> Verdicts:
    return Bank([detector]).judge(readings_of(values, 0, times))


def comparable(verdicts: Verdicts) -> list[tuple]:
    """Return verdicts by row as bytes, without indices into the batch."""
    points, notices = verdicts.points.copy(), verdicts.notices.copy()
    points["reading"] = notices["point"] = 0
    found = []
    for row in np.unique(points["row"]).tolist():
        told = notices["row"] == row
        found.append(
            (row, points[points["row"] == row].tobytes(), notices[told].tobytes(), verdicts.recent[told].tobytes())
        )
    return found


def joined(parts: Sequence[Verdicts]) -> Verdicts:
    return Verdicts(
        np.concatenate([part.outcomes for part in parts]),
        np.concatenate([np.asarray(part.points).view(POINT) for part in parts]),
        np.concatenate([np.asarray(part.notices).view(NOTICE) for part in parts]),
        np.concatenate([part.recent for part in parts]),
        np.concatenate([part.set_back for part in parts]),
    )


def in_cuts(detectors: Sequence[Detector], readings: np.ndarray, cuts: Sequence[int]) -> Verdicts:
    """Judge readings cut at the given places."""
    bank = Bank(detectors)
    edges = [0, *sorted(cuts), len(readings)]
    return joined([bank.judge(readings[a:b]) for a, b in itertools.pairwise(edges)])


def every_way(detectors: Sequence[Detector], readings: np.ndarray, seed: int = 0) -> list[Verdicts]:
    """Judge readings at once, singly, in random cuts and with the rows interleaved otherwise."""
    stream, count = random.Random(seed), len(readings)
    shuffled = sorted(range(count), key=lambda place: (stream.random(),))
    order = {
        row: iter([place for place in range(count) if readings["row"][place] == row])
        for row in set(readings["row"].tolist())
    }
    interleaved = readings[[next(order[int(readings["row"][place])]) for place in shuffled]]
    return [
        in_cuts(detectors, readings, []),
        in_cuts(detectors, readings, range(1, count)),
        in_cuts(detectors, readings, sorted(stream.sample(range(1, count), min(7, count - 1)))),
        in_cuts(detectors, interleaved, []),
    ]
