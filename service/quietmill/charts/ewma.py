"""The exponentially weighted moving average of z."""

from math import sqrt
from typing import Final

from quietmill.charts.compiler import Record, compiled
from quietmill.model import HIGH, LOW

__all__ = ["ewma"]

NO_DECAY_LEFT: Final = 1e-18
"""Below this the limits have become asymptotic to the last bit. Left to shrink, it would turn denormal after some
hundreds of points and slow the walk for good."""

NOTHING_LEFT: Final = 1e-150
"""An average so small, of points all exactly on the centre, is the centre; the same trap."""


@compiled
def ewma(row: Record, state: Record, z: float, eps: float) -> int:
    """The moving average of z lies beyond its limits.

    E = lambda z + (1 - lambda) E from E = 0, beyond L sqrt(lambda / (2 - lambda) (1 - (1 - lambda)^(2t))), t = 1 at
    the first point; asymptotic limits drop the last factor. A small lambda remembers longer and finds smaller
    shifts. Roberts, Technometrics 1 (1959) 239-250; Lucas and Saccucci, Technometrics 32 (1990) 1-12.
    """
    keep = 1.0 - row.lam
    average = row.lam * z + keep * state.ewma
    if abs(average) < NOTHING_LEFT:
        average = 0.0
    decay = state.decay * (keep * keep)
    if decay < NO_DECAY_LEFT:
        decay = 0.0
    state.ewma = average
    state.decay = decay
    limit = row.ewma_width * sqrt(1.0 - decay) if decay > 0.0 else row.ewma_width
    if average - limit > eps:
        return HIGH
    if -average - limit > eps:
        return LOW
    return 0
