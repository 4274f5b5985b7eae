"""Series into the bank, every way: at once, singly, in random cuts, mixed with other rows."""

import itertools
import random
from collections.abc import Sequence

import numpy as np

from quietmill.charts.bank import Bank
from quietmill.model import NO_TIME, NOTICE, POINT, READING, Detector, Verdicts

MINUTE = 60_000_000


def readings_of(values: Sequence[float] | np.ndarray, row: int = 0, times: Sequence[int] | None = None) -> np.ndarray:
    """Return a series as readings a minute apart, each a message of its own."""
    readings = np.zeros(len(values), READING)
    readings["row"] = row
    readings["value"] = values
    readings["time"] = np.arange(len(values)) * MINUTE if times is None else times
    readings["message"] = np.arange(len(values)) * 1000 + row
    readings["arrival"] = readings["sequence"] = NO_TIME
    readings["fingerprint"] = readings["value"].view(np.uint64)
    return readings


def judged(detector: Detector, values: Sequence[float] | np.ndarray, times: Sequence[int] | None = None) -> Verdicts:
    return Bank([detector]).judge(readings_of(values, 0, times))


def comparable(readings: np.ndarray, verdicts: Verdicts) -> list[tuple]:
    """Return the verdicts of readings row by row, without their indices into the batch."""
    points, notices = verdicts.points.copy(), verdicts.notices.copy()
    points["reading"] = notices["point"] = 0
    clocks = np.zeros(len(readings), bool)
    clocks[verdicts.set_back] = True
    found = []
    for row in np.unique(readings["row"]).tolist():
        own, told = readings["row"] == row, notices["row"] == row
        found.append(
            (
                row,
                verdicts.outcomes[own].tobytes(),
                points[points["row"] == row].tobytes(),
                notices[told].tobytes(),
                verdicts.recent[told].tobytes(),
                clocks[own].tobytes(),
            )
        )
    return found


def joined(parts: Sequence[Verdicts]) -> Verdicts:
    """Return the verdicts of batches as those of one, their indices counted through."""
    readings = [0, *itertools.accumulate(len(part.outcomes) for part in parts)]
    points, notices = [], []
    for part, before in zip(parts, readings, strict=False):
        made, told = np.array(part.points).view(POINT), np.array(part.notices).view(NOTICE)
        made["reading"] += before
        told["point"] += sum(len(each) for each in points)
        points.append(made)
        notices.append(told)
    return Verdicts(
        np.concatenate([part.outcomes for part in parts]),
        np.concatenate(points),
        np.concatenate(notices),
        np.concatenate([part.recent for part in parts]),
        np.concatenate([part.set_back + before for part, before in zip(parts, readings, strict=False)]),
    )


def in_cuts(detectors: Sequence[Detector], readings: np.ndarray, cuts: Sequence[int]) -> Verdicts:
    """Judge readings cut at the given places."""
    bank = Bank(detectors)
    edges = [0, *sorted(cuts), len(readings)]
    return joined([bank.judge(readings[a:b]) for a, b in itertools.pairwise(edges)])


def in_other_company(readings: np.ndarray, seed: int) -> np.ndarray:
    """Return the readings with their rows mixed otherwise, each row's own in their order."""
    places = np.arange(len(readings))
    rows = np.random.default_rng(seed).permutation(readings["row"])
    order = np.empty(len(readings), np.int64)
    for row in np.unique(rows):
        order[rows == row] = places[readings["row"] == row]
    return readings[order]


def every_way(detectors: Sequence[Detector], readings: np.ndarray, seed: int = 0) -> list[list[tuple]]:
    """Judge readings at once, singly, in random cuts and in other company; return what each way says."""
    stream, count = random.Random(seed), len(readings)
    cuts = [
        [],
        range(1, count),
        sorted(stream.sample(range(1, count), min(7, count - 1))),
        sorted(stream.choices(range(count + 1), k=5)),  # some of them empty batches
    ]
    mixed = in_other_company(readings, seed)
    return [
        *(comparable(readings, in_cuts(detectors, readings, places)) for places in cuts),
        comparable(mixed, in_cuts(detectors, mixed, cuts[2])),
    ]
