"""Whether a reading is news: late and repeated readings, counters that started again, clocks that were set back.

| the reading, beside the last accepted one of its characteristic | outcome |
|---|---|
| brings a counter: equal, in another message | repeated |
| brings a counter: lower, by no more than 1,000 or half of where it wraps | late |
| brings a time: equal, in another message with the same fingerprint | repeated |
| brings a time: older | late, unless the sender's clock was set back |
| anything else, or neither counter nor time | accepted |

Where a counter is expected and missing, as in data collected without it, the time decides.
"""

from typing import Final

from quietmill.charts.compiler import Record, compiled
from quietmill.model import NO_TIME, Outcome

__all__ = ["SET_BACK", "arrive"]

ACCEPTED: Final = int(Outcome.ACCEPTED)
LATE: Final = int(Outcome.LATE)
REPEATED: Final = int(Outcome.REPEATED)

SET_BACK: Final = 128
"""Added to ACCEPTED for the reading by which a clock counts as set back."""

LATE_IN_A_ROW: Final = 20
"""So many late readings in a row make a clock that was set back, if they arrived at the pace of their own times."""


@compiled
def clock_was_set_back(state: Record, reading: Record) -> bool:
    """Tell a sender whose clock was set back from one that sends an old backlog again.

    Counts late readings in a row whose own times rise; from the twentieth on they are the new time, if they arrived
    over at least half the span of those times. A backlog arrives much faster than it was measured.
    """
    if state.late > 0 and reading.time > state.late_time and state.late_first_arrival != NO_TIME:
        state.late += 1
    else:
        state.late = 1
        state.late_first_time = reading.time
        state.late_first_arrival = reading.arrival
    state.late_time = reading.time
    if state.late < LATE_IN_A_ROW or reading.arrival == NO_TIME:
        return False
    return 2 * (reading.arrival - state.late_first_arrival) >= reading.time - state.late_first_time


@compiled
def arrive(row: Record, state: Record, reading: Record) -> int:
    """Return the outcome of a reading (an `Outcome`, or ACCEPTED + SET_BACK), and remember it when accepted."""
    outcome = ACCEPTED
    if state.accepted > 0:
        if row.sequenced and min(reading.sequence, state.last_sequence) > NO_TIME:
            fall = state.last_sequence - reading.sequence
            if fall == 0 and reading.message != state.last_message:
                return REPEATED
            if 0 < fall <= row.sequence_fall:
                return LATE
        elif row.timed:
            if reading.time < state.last_time:
                if not clock_was_set_back(state, reading):
                    return LATE
                outcome = ACCEPTED + SET_BACK
            elif (
                reading.time == state.last_time
                and reading.message != state.last_message
                and reading.fingerprint == state.last_fingerprint
            ):
                return REPEATED
    state.accepted += 1
    state.late = 0
    state.last_time = reading.time
    state.last_message = reading.message
    state.last_sequence = reading.sequence
    state.last_fingerprint = reading.fingerprint
    return outcome
