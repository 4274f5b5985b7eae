"""How a characteristic lies in memory: a record of settings, a record of state, and its share of the kept points.

Arrays of structs, so that judging a point touches a few cache lines.
"""

from collections.abc import Sequence
from math import inf, isfinite, nan, pi, sqrt
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from quietmill.model import COUNTS, HIGH, LOW, NO_TIME, UNDIRECTED, Detector, Rule, rule_bits

__all__ = ["KEPT", "ROW", "STATE", "fresh_pool", "fresh_state", "pack"]

ROW: Final = np.dtype(
    [
        ("centre", np.float64),
        ("sigma", np.float64),  # of the point
        ("width", np.float64),  # multiple of sigma of beyond_limits and of the control limits
        ("lam", np.float64),  # 0: no EWMA
        ("ewma_width", np.float64),  # L sqrt(lambda / (2 - lambda))
        ("k", np.float64),
        ("h", np.float64),  # 0: no CUSUM
        ("cap", np.float64),  # ceiling times h
        ("spread_lower", np.float64),  # in the unit, NaN where it cannot be reached
        ("spread_upper", np.float64),
        ("gap", np.int64),  # microseconds; 0: none
        ("pool", np.int64),  # where the row's kept points begin in the pool
        ("kept", np.int32),  # how many there may be
        ("mask", np.int32),  # rule bits that may hold: the rules in use, in the directions that may signal
        ("same_side", np.int32),  # counts of points
        ("stratification", np.int32),
        ("mixture", np.int32),
        ("quiet_points", np.int32),
        ("timed", np.int32),
        ("sequenced", np.int32),
        ("sequence_fall", np.int64),  # a counter that falls further has started again
        ("head_start", np.float64),
        ("ewma_exact", np.float64),  # 1 or 0: the decay before the first point
    ],
    align=True,
)
"""Settings of a row, read only while judging; what every point needs lies first."""

STATE: Final = np.dtype(
    [
        # arrival
        ("accepted", np.int64),  # readings
        ("last_time", np.int64),
        ("last_message", np.int64),
        ("last_sequence", np.int64),
        ("last_fingerprint", np.uint64),
        ("late", np.int64),  # late readings in a row whose own times rise
        # points
        ("number", np.int64),
        ("first", np.int64),  # number of the first point since the detector's start
        ("point_time", np.int64),
        ("value", np.float64),
        # windows of rules, cleared by a gap
        ("z", np.float64),  # of the last point
        ("seen", np.int32),  # points in them
        ("side_run", np.int32),  # signed
        ("trend_run", np.int32),  # signed
        ("alternating_run", np.int32),
        ("alternating_move", np.int32),
        ("above_two", np.int32),  # the last three points, a bit each, the newest lowest
        ("below_two", np.int32),
        ("above_one", np.int32),  # the last five
        ("below_one", np.int32),
        ("within_run", np.int32),
        ("outside_run", np.int32),
        # episode
        ("quiet", np.int32),  # points in a row without a rule holding
        ("open", np.int32),
        ("members", np.int32),
        # EWMA and CUSUM, which no gap clears
        ("ewma", np.float64),  # of z
        ("decay", np.float64),  # (1 - lambda)^(2t)
        ("cusum_high", np.float64),
        ("high_count", np.int64),  # points since the arm's last zero,
        ("high_sum", np.float64),  # their deviations from the centre, in the unit and in sigmas
        ("high_sum_z", np.float64),
        ("cusum_low", np.float64),
        ("low_count", np.int64),
        ("low_sum", np.float64),
        ("low_sum_z", np.float64),
        ("high_number", np.int64),  # number and time of the arm's first point since its last zero
        ("high_time", np.int64),
        ("low_number", np.int64),
        ("low_time", np.int64),
        # what only an episode, a start or a late reading touches
        ("start", np.int64),  # time of the first point since the detector's start
        ("order", np.int64),
        ("raised_number", np.int64),
        ("raised_time", np.int64),
        ("onset_number", np.int64),
        ("onset_time", np.int64),
        ("shift", np.float64),
        ("shift_sigma", np.float64),
        ("returned", np.int64),  # number and time of the point at which the last episode returned
        ("returned_time", np.int64),
        ("late_time", np.int64),  # of the last late reading in the row, and of the first with its arrival
        ("late_first_time", np.int64),
        ("late_first_arrival", np.int64),
    ],
    align=True,
)
"""Memory of a row, moved only by judging; what every point touches lies first."""

KEPT: Final = np.dtype([("time", np.int64), ("value", np.float64), ("z", np.float64)])
"""A kept point; that of number n lies at n modulo the row's share of the pool."""

MOVING_RANGE_MEAN: Final = 2 / sqrt(pi)
"""d2 of two, the mean range of a normal sample of two in sigmas."""

MOVING_RANGE_SIGMA: Final = sqrt(2 - 4 / pi)
"""d3 of two, the standard deviation of that range."""


def mask_of(detector: Detector) -> int:
    """Return the rule bits that may hold: rules in use, in the directions that may signal."""
    used = [rule for rule in Rule if rule in detector.rules]
    used += [Rule.EWMA] * (detector.ewma is not None)
    used += [Rule.CUSUM] * (detector.cusum is not None)
    used += [Rule.SPREAD] * detector.spread_signals
    sides = {"both": HIGH | LOW, "high": HIGH, "low": LOW}[detector.side]
    return sum(rule_bits(rule, HIGH if rule in UNDIRECTED else sides) for rule in used)


def pack(detectors: Sequence[Detector]) -> NDArray[np.void]:
    """Return the settings records of all detectors, a row each, their shares of the pool one after another."""
    rows = np.zeros(len(detectors), ROW)
    pool = 0
    for index, detector in enumerate(detectors):
        row: Any = rows[index]
        ewma, cusum = detector.ewma, detector.cusum
        for name in ("centre", "sigma", "width", "gap", "quiet_points", "timed", "sequenced"):
            row[name] = getattr(detector, name)
        row["mask"] = mask_of(detector)
        for rule in (Rule.SAME_SIDE, Rule.STRATIFICATION, Rule.MIXTURE):
            row[rule.label] = detector.rules.get(rule, COUNTS[rule][0])
        if ewma is not None:
            row["lam"] = ewma.lam
            row["ewma_width"] = ewma.width * sqrt(ewma.lam / (2 - ewma.lam))
            row["ewma_exact"] = ewma.exact
        if cusum is not None:
            row["k"], row["h"], row["head_start"] = cusum.k, cusum.h, cusum.head_start
            row["cap"] = cusum.ceiling * cusum.h if isfinite(cusum.ceiling) else inf
        row["spread_lower"] = nan  # d2 - 3 d3 lies below 0 for two
        row["spread_upper"] = (MOVING_RANGE_MEAN + 3 * MOVING_RANGE_SIGMA) * detector.sigma
        row["kept"], row["pool"] = detector.points_kept, pool
        pool += detector.points_kept
        wraps = detector.sequence_size
        row["sequence_fall"] = min(1000, wraps // 2) if wraps else 1000
    return rows


def fresh_state(rows: NDArray[np.void]) -> NDArray[np.void]:
    """Return the state before the first reading of every row: sums at their head start, nothing seen."""
    state = np.zeros(len(rows), STATE)
    for name in ("last_time", "last_sequence", "start", "point_time", "raised_time", "onset_time", "returned_time"):
        state[name] = NO_TIME
    for name in ("value", "shift", "shift_sigma"):
        state[name] = nan
    state["first"] = 1
    state["last_message"] = -1
    state["decay"] = rows["ewma_exact"]
    state["cusum_high"] = state["cusum_low"] = rows["head_start"]
    return state


def fresh_pool(rows: NDArray[np.void]) -> NDArray[np.void]:
    """Return the pool in which all rows keep their last points."""
    return np.zeros(int(rows["kept"].sum()), KEPT)
