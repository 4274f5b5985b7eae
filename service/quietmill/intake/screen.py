"""Screening: which readings can be no measurement at all, told from each one alone."""

from typing import Final

import numpy as np
from numpy.typing import NDArray

from quietmill.model import OUT_OF_RANGE_SIGMAS, Outcome, Records

__all__ = ["FUTURE_MICROSECONDS", "screen"]

FUTURE_MICROSECONDS: Final = 5 * 60 * 1_000_000
"""How far a reading's own time may lie after its arrival: clocks of machines differ."""


def screen(readings: Records, centre: NDArray[np.float64], sigma: NDArray[np.float64]) -> NDArray[np.uint8]:
    """Return the `Outcome` of each reading; `ACCEPTED` still leaves it to the bank whether it is late or repeated.

    `centre` and `sigma` are those of each reading's characteristic. No reading's outcome depends on another's,
    and age is never a reason to refuse: a machine that was off line sends its backlog.
    """
    value = readings["value"]
    outcomes = np.zeros(len(readings), np.uint8)
    outcomes[readings["time"] > readings["arrival"] + FUTURE_MICROSECONDS] = Outcome.FUTURE
    with np.errstate(over="ignore", invalid="ignore"):
        outcomes[np.abs(value - centre) > OUT_OF_RANGE_SIGMAS * sigma] = Outcome.OUT_OF_RANGE
    outcomes[~np.isfinite(value)] = Outcome.NOT_A_NUMBER
    return outcomes
