"""The bank of detectors: every characteristic a row, and one compiled walk over the readings of a batch."""

from collections.abc import Sequence
from math import nan
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from quietmill.charts import rules
from quietmill.charts.arrival import SET_BACK, arrive
from quietmill.charts.compiler import COMPILED, Record, attributes, compiled
from quietmill.charts.cusum import cusum
from quietmill.charts.episode import follow, tell
from quietmill.charts.ewma import ewma
from quietmill.charts.layout import fresh_pool, fresh_state, pack
from quietmill.charts.onset import date_change
from quietmill.model import (
    HIGH,
    LOW,
    NOTICE,
    POINT,
    RECENT,
    RECENT_POINTS,
    Detector,
    Notice,
    Outcome,
    Rule,
    Verdicts,
)

__all__ = ["Bank", "judge"]

BEYOND_LIMITS: Final = 2 * int(Rule.BEYOND_LIMITS)
SAME_SIDE: Final = 2 * int(Rule.SAME_SIDE)
TREND: Final = 2 * int(Rule.TREND)
ALTERNATING: Final = 2 * int(Rule.ALTERNATING)
TWO_OF_THREE: Final = 2 * int(Rule.TWO_OF_THREE)
FOUR_OF_FIVE: Final = 2 * int(Rule.FOUR_OF_FIVE)
STRATIFICATION: Final = 2 * int(Rule.STRATIFICATION)
MIXTURE: Final = 2 * int(Rule.MIXTURE)
EWMA: Final = 2 * int(Rule.EWMA)
CUSUM: Final = 2 * int(Rule.CUSUM)
SPREAD: Final = 2 * int(Rule.SPREAD)
RAISED: Final = int(Notice.RAISED)
ACCEPTED: Final = int(Outcome.ACCEPTED)

LINE: Final = 1e-9
"""Half the width of a line on the scale of z: two z within it are a tie, a z within it of a line is on it."""

ROUNDING: Final = 2.0**-50
"""The same for values that are large against their sigma, where binary fractions differ from what is on paper."""

NOTICES_AT_ONCE: Final = 256
"""The walk pauses when so many notices wait to be taken; results do not depend on it."""

SHEET_POINTS: Final = 1024
"""Points are allocated so many at once."""

NO_INDICES: Final = np.empty(0, np.int64)
NO_NOTICES: Final = np.empty(0, NOTICE)
NO_RECENT: Final = np.empty((0, RECENT_POINTS), RECENT)


@compiled
def width_of_lines(row: Record, value: float) -> float:
    """Return half the width of a line at a value, on the scale of z."""
    rounding = ROUNDING * (abs(value) + abs(row.centre))
    return rounding / row.sigma if rounding > LINE * row.sigma else LINE


@compiled
def beyond_spread(row: Record, spread: float, eps: float) -> int:
    """The spread statistic (the moving range of two) lies beyond its own limits; on the limit, or none yet: no."""
    if spread - row.spread_upper > eps * row.sigma:
        return HIGH
    if row.spread_lower - spread > eps * row.sigma:
        return LOW
    return 0


@compiled
def judge_point(row: Record, state: Record, pool: Record, time: int, value: float, spread: float) -> int:
    """Move a row by one point; return the rules that hold at it.

    z = (value - centre) / sigma. Every rule sees every point, whether it is used or not; `row.mask` says which may
    hold. `spread` is NaN where there is none.
    """
    deviation = value - row.centre
    z = deviation / row.sigma
    eps = width_of_lines(row, value)
    state.number += 1
    if state.number == state.first:
        state.start = time
    bits = rules.beyond_limits(row, state, z, eps) << BEYOND_LIMITS
    bits |= rules.same_side(row, state, z, eps) << SAME_SIDE
    bits |= rules.trend(row, state, z, eps) << TREND
    bits |= rules.alternating(row, state, z, eps) << ALTERNATING
    bits |= rules.two_of_three(row, state, z, eps) << TWO_OF_THREE
    bits |= rules.four_of_five(row, state, z, eps) << FOUR_OF_FIVE
    bits |= rules.stratification(row, state, z, eps) << STRATIFICATION
    bits |= rules.mixture(row, state, z, eps) << MIXTURE
    if row.lam > 0.0:
        bits |= ewma(row, state, z, eps) << EWMA
    if row.h > 0.0:
        bits |= cusum(row, state, z, eps, state.number, time, deviation) << CUSUM
    bits |= beyond_spread(row, spread, eps) << SPREAD
    state.seen += 1
    state.z = z
    state.value = value
    state.point_time = time
    kept = pool[row.pool + state.number % row.kept]
    kept.time = time
    kept.value = value
    kept.z = z
    return bits & row.mask


@compiled
def write_point(row: Record, state: Record, point: Record, index: int, reading: int, spread: float, bits: int) -> None:
    """Write what was judged at the row's newest point."""
    point.row = index
    point.reading = reading
    point.number = state.number
    point.time = state.point_time
    point.bits = bits
    point.value = state.value
    point.centre = row.centre
    point.sigma = row.sigma
    point.z = state.z
    point.lower = row.centre - row.width * row.sigma
    point.upper = row.centre + row.width * row.sigma
    point.spread = spread
    point.spread_lower = row.spread_lower
    point.spread_upper = row.spread_upper
    point.ewma = row.centre + state.ewma * row.sigma if row.lam > 0.0 else nan
    point.cusum_high = state.cusum_high if row.h > 0.0 else nan
    point.cusum_low = state.cusum_low if row.h > 0.0 else nan


@compiled
def judge(
    rows: NDArray[Any],
    states: NDArray[Any],
    pool: NDArray[Any],
    readings: NDArray[Any],
    begin: int,
    outcomes: NDArray[np.uint8],
    points: NDArray[Any],
    made: int,
    notices: NDArray[Any],
    recent: NDArray[Any],
) -> tuple[int, int, int, int]:
    """Walk the readings from `begin` on in order of arrival: arrival, chart, rules, episode.

    Writes an outcome a reading, and points from index `made` on. Pauses when `notices` is full. Returns where it
    paused (the number of readings, when done), how many points and notices there are, and how many clocks were found
    set back.
    """
    told = 0
    set_back = 0
    for place in range(begin, len(readings)):
        if told == len(notices):
            return place, made, told, set_back
        reading = readings[place]
        index = reading.row
        row: Record = rows[index]
        state: Record = states[index]
        outcome = arrive(row, state, reading)
        outcomes[place] = outcome
        if outcome == ACCEPTED + SET_BACK:
            set_back += 1
        elif outcome != ACCEPTED:
            continue
        if row.gap > 0 and state.seen > 0 and reading.time - state.point_time > row.gap:
            rules.clear(state)
        spread = abs(reading.value - state.value) if state.seen > 0 else nan
        bits = judge_point(row, state, pool, reading.time, reading.value, spread)
        write_point(row, state, points[made], index, place, spread, bits)
        members = state.members if state.open else 0
        kind = follow(row, state, bits)
        if kind:
            if kind == RAISED:
                date_change(row, state, pool, bits)
            tell(row, state, pool, notices[told], recent[told], kind, index, made, bits & ~members)
            told += 1
        made += 1
    return len(readings), made, told, set_back


class Bank:
    """The detectors of a plant, ready to judge.

    >>> from quietmill.model import READING
    >>> bank = Bank([Detector(centre=240.0, sigma=2.0, rules={Rule.BEYOND_LIMITS: 3}, timed=False)])
    >>> readings = np.zeros(2, READING)
    >>> readings["value"] = 241.0, 249.0
    >>> [Notice(notice["kind"]).name for notice in bank.judge(readings).notices]
    ['RAISED']

    `rows` and `state` are structured arrays with a record for each detector, in their order (`layout.ROW`, `STATE`);
    `pool` holds the points they keep.
    """

    def __init__(self, detectors: Sequence[Detector]) -> None:
        self.rows = attributes(pack(detectors))
        self.state = attributes(fresh_state(self.rows))
        self.pool = attributes(fresh_pool(self.rows))
        self._new_sheet(SHEET_POINTS)
        self._notices = attributes(np.zeros(NOTICES_AT_ONCE, NOTICE))
        self._recent = attributes(np.zeros((NOTICES_AT_ONCE, RECENT_POINTS), RECENT))

    def judge(self, readings: NDArray[Any]) -> Verdicts:
        """Judge a batch of readings (`READING`, shape (n,), in order of arrival) and remember it.

        How a series is cut into batches makes no difference. The rows of `readings` are trusted to exist.
        """
        if not COMPILED:
            readings = attributes(readings)
        count = len(readings)
        begin, end = self._used, self._used + count
        if end > self._size:
            self._new_sheet(max(count, SHEET_POINTS))
            begin, end = 0, count
        self._used = end
        outcomes, points = self._outcomes[begin:end], self._points[begin:end]
        place, made, told, set_back = judge(
            self.rows, self.state, self.pool, readings, 0, outcomes, points, 0, self._notices, self._recent
        )
        if told or set_back or place < count:
            return self._go_on(readings, outcomes, points, place, made, told, set_back)
        return Verdicts(outcomes, points if made == count else points[:made], NO_NOTICES, NO_RECENT, NO_INDICES)

    def _go_on(
        self,
        readings: NDArray[Any],
        outcomes: NDArray[np.uint8],
        points: NDArray[Any],
        place: int,
        made: int,
        told: int,
        set_back: int,
    ) -> Verdicts:
        """Take the notices of a walk that has something to say, and let it go on where it paused."""
        notices, recent = [self._notices[:told].copy()], [self._recent[:told].copy()]
        while place < len(readings):
            place, made, told, found = judge(
                self.rows, self.state, self.pool, readings, place, outcomes, points, made, self._notices, self._recent
            )
            set_back += found
            notices.append(self._notices[:told].copy())
            recent.append(self._recent[:told].copy())
        clocks = NO_INDICES
        if set_back:
            clocks = np.flatnonzero(outcomes & SET_BACK)
            outcomes &= SET_BACK - 1
        return Verdicts(outcomes, points[:made], np.concatenate(notices), np.concatenate(recent), clocks)

    def _new_sheet(self, size: int) -> None:
        """Take a blank sheet for points and outcomes: verdicts are cut from it, and no part of it is used twice.

        Allocating for each reading alone would cost more than judging it.
        """
        self._points = attributes(np.empty(size, POINT))
        self._outcomes = np.empty(size, np.uint8)
        self._used, self._size = 0, size
