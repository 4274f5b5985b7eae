"""When the change began, and how large it is: estimated once, at the point that raises the signal."""

from math import nan
from typing import Final

from quietmill.charts.compiler import Record, compiled
from quietmill.charts.rules import ALTERNATING_POINTS, TREND_POINTS
from quietmill.model import HIGH, LOW, Rule

__all__ = ["date_change"]

BEYOND_LIMITS: Final = int(Rule.BEYOND_LIMITS)
SAME_SIDE: Final = int(Rule.SAME_SIDE)
TREND: Final = int(Rule.TREND)
ALTERNATING: Final = int(Rule.ALTERNATING)
TWO_OF_THREE: Final = int(Rule.TWO_OF_THREE)
FOUR_OF_FIVE: Final = int(Rule.FOUR_OF_FIVE)
STRATIFICATION: Final = int(Rule.STRATIFICATION)
MIXTURE: Final = int(Rule.MIXTURE)
EWMA: Final = int(Rule.EWMA)
CUSUM: Final = int(Rule.CUSUM)
SPREAD: Final = int(Rule.SPREAD)

LEVEL_RULES: Final = (BEYOND_LIMITS, SAME_SIDE, TWO_OF_THREE, FOUR_OF_FIVE, EWMA, CUSUM)
"""Rules that speak of the level, in the order of the table; the first that starts decides."""

CLEARLY: Final = 1 + 1e-9
"""How many times as likely an earlier onset must be to win: what ties on paper differs in binary by its last bits."""


@compiled
def window_of(row: Record, bits: int) -> int:
    """Return how many points the window of the first pattern among `bits` takes."""
    if bits >> (2 * TREND) & 3:
        return TREND_POINTS
    if bits >> (2 * ALTERNATING) & 3:
        return ALTERNATING_POINTS
    if bits >> (2 * STRATIFICATION) & 3:
        return row.stratification
    if bits >> (2 * MIXTURE) & 3:
        return row.mixture
    return 2  # the moving range


@compiled
def date_by_arm(state: Record, oldest: int, direction: int) -> bool:
    """Date the change by the last zero of a CUSUM arm, where that is older than the points kept."""
    number, time, count = state.high_number, state.high_time, state.high_count
    total, total_z = state.high_sum, state.high_sum_z
    if direction == LOW:
        number, time, count = state.low_number, state.low_time, state.low_count
        total, total_z = state.low_sum, state.low_sum_z
    if number >= oldest or number <= state.returned:
        return False
    state.onset_number = number
    state.onset_time = time
    state.shift = total / count
    state.shift_sigma = total_z / count
    return True


@compiled
def date_change(row: Record, state: Record, pool: Record, bits: int) -> None:
    """Write onset and shift of a signal that rules `bits` raise at the point just kept.

    Rules on a level: the maximum-likelihood change point for a known baseline, the t that maximises (T - t) times
    the squared mean of z after t (the latest, if equal), that mean having the signal's sign; the onset is the point
    after t. Samuel, Pignatiello and Calvin, Quality Engineering 10 (1998) 521-527. Where a CUSUM alone signals, t is
    not before the last zero of its arm; where that zero is older than the points kept, the arm itself tells. Patterns
    and the spread chart: the first point of the window, and the shift is NaN. A level rule decides before a pattern,
    then the order of the table.
    """
    number = state.number
    oldest = max(state.first, number - row.kept + 1)
    level = 0
    direction = 0
    levels = 0
    for rule in LEVEL_RULES:
        if bits >> (2 * rule) & 3:
            levels += 1
            if direction == 0:
                level = rule
                direction = HIGH if bits >> (2 * rule) & HIGH else LOW
    if direction == 0:
        onset = max(oldest, number - window_of(row, bits) + 1)
        state.onset_number = onset
        state.onset_time = pool[row.pool + onset % row.kept].time
        state.shift = nan
        state.shift_sigma = nan
        return
    earliest = max(oldest, state.returned + 1)
    if level == CUSUM and levels == 1:
        if date_by_arm(state, oldest, direction):
            return
        earliest = max(earliest, state.high_number if direction == HIGH else state.low_number)
    sign = 1.0 if direction == HIGH else -1.0
    best = -1.0
    onset = number
    best_z = sign * pool[row.pool + number % row.kept].z
    best_deviation = pool[row.pool + number % row.kept].value - row.centre
    total_z = 0.0
    total_deviation = 0.0
    for candidate in range(number, earliest - 1, -1):
        kept = pool[row.pool + candidate % row.kept]
        count = number - candidate + 1
        total_z += sign * kept.z
        total_deviation += kept.value - row.centre
        likelihood = total_z * total_z / count
        if total_z > 0.0 and likelihood > best * CLEARLY:
            best = likelihood
            onset = candidate
            best_z = total_z / count
            best_deviation = total_deviation / count
    state.onset_number = onset
    state.onset_time = pool[row.pool + onset % row.kept].time
    state.shift = best_deviation
    state.shift_sigma = sign * best_z
