"""Which readings are news, again and slowly: the whole past is looked at afresh at every reading."""

from collections.abc import Sequence
from typing import NamedTuple

from quietmill.model import Detector, Outcome


class Reading(NamedTuple):
    """A reading as its sender's clock, its counter and the messages tell it."""

    time: int
    fingerprint: int
    message: int
    arrival: int
    sequence: int


def outcomes_of(readings: Sequence[Reading], detector: Detector) -> tuple[list[Outcome], list[int]]:
    """Return the outcome of every reading, and the places at which a clock was found set back."""
    found: list[Outcome] = []
    set_back: list[int] = []
    for place, reading in enumerate(readings):
        accepted = [each for each in range(place) if found[each] is Outcome.ACCEPTED]
        outcome = beside(reading, readings[accepted[-1]], detector) if accepted else Outcome.ACCEPTED
        if outcome is Outcome.LATE and not detector.sequenced:
            late = [each for each in range(accepted[-1] + 1, place) if found[each] is Outcome.LATE]
            if clock_set_back([readings[each] for each in late] + [reading]):
                outcome = Outcome.ACCEPTED
                set_back.append(place)
        found.append(outcome)
    return found, set_back


def beside(reading: Reading, last: Reading, detector: Detector) -> Outcome:
    """Return the outcome of a reading beside the last accepted one."""
    another = reading.message != last.message
    if detector.sequenced:
        fall = last.sequence - reading.sequence
        started_again = fall > 1000 or (detector.sequence_size > 0 and 2 * fall > detector.sequence_size)
        if fall == 0 and another:
            return Outcome.REPEATED
        return Outcome.LATE if fall > 0 and not started_again else Outcome.ACCEPTED
    if not detector.timed:
        return Outcome.ACCEPTED
    if reading.time == last.time and another and reading.fingerprint == last.fingerprint:
        return Outcome.REPEATED
    return Outcome.LATE if reading.time < last.time else Outcome.ACCEPTED


def clock_set_back(late: Sequence[Reading]) -> bool:
    """Twenty or more late readings whose times rise, that arrived over at least half the span of those times."""
    begin = len(late) - 1
    while begin and late[begin - 1].time < late[begin].time:
        begin -= 1
    rising = late[begin:]
    span = rising[-1].time - rising[0].time
    return len(rising) >= 20 and 2 * (rising[-1].arrival - rising[0].arrival) >= span
