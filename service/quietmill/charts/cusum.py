"""The cumulative sums of z, one for each side, with what each needs to date the change it finds."""

from quietmill.charts.compiler import Record, compiled
from quietmill.model import HIGH, LOW

__all__ = ["cusum"]


@compiled
def cusum(row: Record, state: Record, z: float, eps: float, number: int, time: int, deviation: float) -> int:
    """A cumulative sum lies beyond h.

    C+ = max(0, C+ + z - k), C- = max(0, C- - z - k), both from the head start; the arms are independent and nothing
    resets; the ceiling caps after the test. k is half the shift to find, in sigmas of the point; a larger h signals
    later and falsely less often. Each arm keeps number and time of its first point since it was last zero, and count
    and sums of the points since. `deviation` is that of the point from its centre, in the unit. Page, Biometrika 41
    (1954) 100-115; Lucas and Crosier, Technometrics 24 (1982) 199-205 (head start).
    """
    answer = 0
    high = state.cusum_high + z - row.k
    if high <= eps:
        high = 0.0
        state.high_count = 0
        state.high_sum = 0.0
        state.high_sum_z = 0.0
    else:
        if state.high_count == 0:
            state.high_number = number
            state.high_time = time
        state.high_count += 1
        state.high_sum += deviation
        state.high_sum_z += z
        if high - row.h > eps:
            answer |= HIGH
        high = min(high, row.cap)
    state.cusum_high = high

    low = state.cusum_low - z - row.k
    if low <= eps:
        low = 0.0
        state.low_count = 0
        state.low_sum = 0.0
        state.low_sum_z = 0.0
    else:
        if state.low_count == 0:
            state.low_number = number
            state.low_time = time
        state.low_count += 1
        state.low_sum += deviation
        state.low_sum_z += z
        if low - row.h > eps:
            answer |= LOW
        low = min(low, row.cap)
    state.cusum_low = low
    return answer
