"""The eight run rules, each on (settings, state, z).

Sources: Western Electric, Statistical Quality Control Handbook, 1956 (`beyond_limits`, `two_of_three`,
`four_of_five`, `same_side` of 8); Nelson, "The Shewhart control chart: tests for special causes", Journal of Quality
Technology 16 (1984) 237-239 (all eight).

Every function answers HIGH, LOW or 0; a rule without a direction answers HIGH. `eps` is the width of a line: two z
within it are a tie, and a point on a line never helps a signal. A rule holds at every point at which its window is
satisfied; nothing resets on a signal. `state.seen` counts the points before this one in the windows, `state.z` is
the last of them.
"""

from quietmill.charts.compiler import Record, compiled
from quietmill.model import HIGH, LOW

__all__ = [
    "alternating",
    "beyond_limits",
    "clear",
    "four_of_five",
    "mixture",
    "same_side",
    "stratification",
    "trend",
    "two_of_three",
]

TREND_POINTS = 6
ALTERNATING_POINTS = 14


@compiled
def clear(state: Record) -> None:
    """Empty the windows of all rules, as a gap does."""
    state.seen = 0
    state.side_run = 0
    state.trend_run = 0
    state.alternating_run = 0
    state.alternating_move = 0
    state.above_two = 0
    state.below_two = 0
    state.above_one = 0
    state.below_one = 0
    state.within_run = 0
    state.outside_run = 0


@compiled
def movement(state: Record, z: float, eps: float) -> int:
    """Return 1 for a strict rise from the point before, -1 for a strict fall, 0 for a tie or a first point."""
    if state.seen == 0:
        return 0
    if z - state.z > eps:
        return 1
    if state.z - z > eps:
        return -1
    return 0


@compiled
def beyond_limits(row: Record, state: Record, z: float, eps: float) -> int:
    """The point lies beyond the control limits. On the limit: no. (Western Electric 1956; Nelson's test 1.)"""
    if z - row.width > eps:
        return HIGH
    if -z - row.width > eps:
        return LOW
    return 0


@compiled
def same_side(row: Record, state: Record, z: float, eps: float) -> int:
    """So many points in a row on one side of the centre; one on the centre breaks the run. (Nelson's test 2: 9.)"""
    run = state.side_run
    if z > eps:
        run = max(run, 0) + 1
    elif -z > eps:
        run = min(run, 0) - 1
    else:
        run = 0
    state.side_run = run
    if run >= row.same_side:
        return HIGH
    if -run >= row.same_side:
        return LOW
    return 0


@compiled
def trend(row: Record, state: Record, z: float, eps: float) -> int:
    """Six points, five strict rises or five strict falls. (Nelson's test 3.)

    A tie restarts at the later point; a turning point belongs to both runs.
    """
    move = movement(state, z, eps)
    run = state.trend_run
    if move > 0:
        run = max(run, 1) + 1
    elif move < 0:
        run = min(run, -1) - 1
    else:
        run = 0
    state.trend_run = run
    if run >= TREND_POINTS:
        return HIGH
    if -run >= TREND_POINTS:
        return LOW
    return 0


@compiled
def alternating(row: Record, state: Record, z: float, eps: float) -> int:
    """Fourteen points, thirteen strict differences of alternating sign; a tie restarts. (Nelson's test 4.)"""
    move = movement(state, z, eps)
    if move == 0:
        state.alternating_run = 1
    elif move == -state.alternating_move:
        state.alternating_run += 1
    else:
        state.alternating_run = 2
    state.alternating_move = move
    return HIGH if state.alternating_run >= ALTERNATING_POINTS else 0


@compiled
def two_of_three(row: Record, state: Record, z: float, eps: float) -> int:
    """It and at least one of the two points before it lie beyond 2 sigma on the same side. (Nelson's test 5.)"""
    above = 1 if z - 2.0 > eps else 0
    below = 1 if -z - 2.0 > eps else 0
    before_above = state.above_two & 3
    before_below = state.below_two & 3
    state.above_two = before_above << 1 | above
    state.below_two = before_below << 1 | below
    if above and before_above:
        return HIGH
    if below and before_below:
        return LOW
    return 0


@compiled
def ones(word: int) -> int:
    """Return how many of the lowest four bits are set."""
    return (word & 1) + (word >> 1 & 1) + (word >> 2 & 1) + (word >> 3 & 1)


@compiled
def four_of_five(row: Record, state: Record, z: float, eps: float) -> int:
    """It and at least three of the four points before it lie beyond 1 sigma on the same side. (Nelson's test 6.)"""
    above = 1 if z - 1.0 > eps else 0
    below = 1 if -z - 1.0 > eps else 0
    before_above = state.above_one & 15
    before_below = state.below_one & 15
    state.above_one = before_above << 1 | above
    state.below_one = before_below << 1 | below
    if above and ones(before_above) >= 3:
        return HIGH
    if below and ones(before_below) >= 3:
        return LOW
    return 0


@compiled
def stratification(row: Record, state: Record, z: float, eps: float) -> int:
    """So many points in a row within 1 sigma; one on 1 sigma breaks. (Nelson's test 7: 15.)"""
    state.within_run = state.within_run + 1 if 1.0 - abs(z) > eps else 0
    return HIGH if state.within_run >= row.stratification else 0


@compiled
def mixture(row: Record, state: Record, z: float, eps: float) -> int:
    """So many points in a row beyond 1 sigma on either side; one on 1 sigma breaks. (Nelson's test 8: 8.)"""
    state.outside_run = state.outside_run + 1 if abs(z) - 1.0 > eps else 0
    return HIGH if state.outside_run >= row.mixture else 0
