"""How a characteristic lies in memory: a record of settings, a record of state, and its share of the kept points.

Arrays of structs, so that judging a point touches a few cache lines. Whole numbers are 64 bits wide, so that plain
Python and compiled code count alike.
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
        ("mask", np.int64),  # rule bits that may hold: the rules in use, in the directions that may signal
        ("width", np.float64),  # multiple of sigma of beyond_limits and of the control limits
        ("lower", np.float64),
        ("upper", np.float64),
        ("same_side", np.int64),  # counts of points
        ("stratification", np.int64),
        ("mixture", np.int64),
        ("lam", np.float64),  # 0: no EWMA
        ("keep", np.float64),  # 1 - lambda
        ("keep_squared", np.float64),
        ("ewma_width", np.float64),  # L sqrt(lambda / (2 - lambda))
        ("ewma_exact", np.int64),
        ("k", np.float64),
        ("h", np.float64),  # 0: no CUSUM
        ("head_start", np.float64),
        ("cap", np.float64),  # ceiling times h
        ("spread_lower", np.float64),  # in the unit, NaN where it cannot be reached
        ("spread_upper", np.float64),
        ("gap", np.int64),  # microseconds; 0: none
        ("quiet_points", np.int64),
        ("kept", np.int64),  # points kept, and where they begin in the pool
        ("pool", np.int64),
        ("timed", np.int64),
        ("sequenced", np.int64),
        ("sequence_fall", np.int64),  # a counter that falls further has started again
    ]
)
"""Settings of a row, read only while judging."""

STATE: Final = np.dtype(
    [
        # arrival
        ("accepted", np.int64),  # readings
        ("last_time", np.int64),
        ("last_message", np.int64),
        ("last_sequence", np.int64),
        ("last_fingerprint", np.uint64),
        ("late", np.int64),  # late readings in a row whose own times rise
        ("late_time", np.int64),  # of the last of them
        ("late_first_time", np.int64),
        ("late_first_arrival", np.int64),
        # points
        ("number", np.int64),
        ("first", np.int64),  # number and time of the first point since the detector's start
        ("start", np.int64),
        ("point_time", np.int64),
        ("value", np.float64),
        ("spread", np.float64),  # NaN: none
        # windows of rules, cleared by a gap
        ("seen", np.int64),  # points in them
        ("z", np.float64),  # of the last point
        ("side_run", np.int64),  # signed
        ("trend_run", np.int64),  # signed
        ("alternating_run", np.int64),
        ("alternating_move", np.int64),
        ("above_two", np.int64),  # the last three points, a bit each, the newest lowest
        ("below_two", np.int64),
        ("above_one", np.int64),  # the last five
        ("below_one", np.int64),
        ("within_run", np.int64),
        ("outside_run", np.int64),
        # EWMA and CUSUM, which no gap clears
        ("ewma", np.float64),  # of z
        ("decay", np.float64),  # (1 - lambda)^(2t)
        ("cusum_high", np.float64),
        ("high_count", np.int64),  # points since the arm's last zero, the first one's number and time,
        ("high_number", np.int64),
        ("high_time", np.int64),
        ("high_sum", np.float64),  # their deviations from the centre, in the unit and in sigmas
        ("high_sum_z", np.float64),
        ("cusum_low", np.float64),
        ("low_count", np.int64),
        ("low_number", np.int64),
        ("low_time", np.int64),
        ("low_sum", np.float64),
        ("low_sum_z", np.float64),
        # episode
        ("open", np.int64),
        ("quiet", np.int64),  # points in a row without a rule holding
        ("members", np.int64),
        ("order", np.int64),
        ("raised_number", np.int64),
        ("raised_time", np.int64),
        ("onset_number", np.int64),
        ("onset_time", np.int64),
        ("shift", np.float64),
        ("shift_sigma", np.float64),
        ("returned", np.int64),  # number and time of the point at which the last episode returned
        ("returned_time", np.int64),
    ]
)
"""Memory of a row, moved only by judging."""

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
        row["lower"] = detector.centre - detector.width * detector.sigma
        row["upper"] = detector.centre + detector.width * detector.sigma
        for rule in (Rule.SAME_SIDE, Rule.STRATIFICATION, Rule.MIXTURE):
            row[rule.label] = detector.rules.get(rule, COUNTS[rule][0])
        if ewma is not None:
            row["lam"] = ewma.lam
            row["keep"] = 1 - ewma.lam
            row["keep_squared"] = (1 - ewma.lam) * (1 - ewma.lam)
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
    for name in ("value", "spread", "shift", "shift_sigma"):
        state[name] = nan
    state["first"] = 1
    state["last_message"] = -1
    state["decay"] = rows["ewma_exact"]
    state["cusum_high"] = state["cusum_low"] = rows["head_start"]
    return state


def fresh_pool(rows: NDArray[np.void]) -> NDArray[np.void]:
    """Return the pool in which all rows keep their last points."""
    return np.zeros(int(rows["kept"].sum()), KEPT)
