"""Episodes: all rules that hold for one change, from the point that raises it to its return."""

from typing import Final

from quietmill.charts.compiler import Record, compiled
from quietmill.model import Ended, Notice, Rule

__all__ = ["follow", "tell"]

RAISED: Final = int(Notice.RAISED)
JOINED: Final = int(Notice.JOINED)
RETURNED: Final = int(Notice.RETURNED)
QUIET: Final = int(Ended.QUIET)
RULES: Final = len(Rule)


@compiled
def append_to_order(order: int, bits: int) -> int:
    """Return the order of joining with the rules of `bits` put behind those that it holds, each once.

    Four bits a rule (its number + 1), the first to join lowest.
    """
    for rule in range(RULES):
        if bits >> (2 * rule) & 3:
            place = 0
            while order >> place & 15 and order >> place & 15 != rule + 1:
                place += 4
            order |= (rule + 1) << place
    return order


@compiled
def follow(row: Record, state: Record, bits: int) -> int:
    """Take the rules that hold at a point into the row's episode; return the `Notice` this gives, or 0.

    A point at which a rule holds while no episode is open raises one; a pair of rule and direction joins an open one
    once; it returns at the last of `quiet_points` points in a row at which no rule holds.
    """
    if bits == 0:
        if not state.open:
            return 0
        state.quiet += 1
        if state.quiet < row.quiet_points:
            return 0
        state.open = 0
        state.returned = state.number
        state.returned_time = state.point_time
        return RETURNED
    state.quiet = 0
    if not state.open:
        state.open = 1
        state.members = bits
        state.order = append_to_order(0, bits)
        state.raised_number = state.number
        state.raised_time = state.point_time
        return RAISED
    joining = bits & ~state.members
    if joining == 0:
        return 0
    state.members |= bits
    state.order = append_to_order(state.order, joining)
    return JOINED


@compiled
def tell(
    row: Record,
    state: Record,
    pool: Record,
    notice: Record,
    shown: Record,
    kind: int,
    index: int,
    point: int,
    joined: int,
) -> None:
    """Write a notice of the row's episode at its newest point, with the points that its event shows.

    `index` is the row, `point` the point's index in the batch, `joined` the rules that started to hold at it.
    """
    notice.kind = kind
    notice.ended = QUIET if kind == RETURNED else 0
    notice.row = index
    notice.point = point
    notice.joined = joined
    notice.members = state.members
    notice.order = state.order
    notice.start = state.start
    notice.raised_number = state.raised_number
    notice.raised_time = state.raised_time
    notice.onset_number = state.onset_number
    notice.onset_time = state.onset_time
    notice.shift = state.shift
    notice.shift_sigma = state.shift_sigma
    count = min(len(shown), row.kept, state.number - state.first + 1)
    notice.recent = count
    for place in range(len(shown)):
        number = state.number - count + 1 + place
        if place < count:
            kept = pool[row.pool + number % row.kept]
            shown[place].number = number
            shown[place].time = kept.time
            shown[place].value = kept.value
        else:
            shown[place].number = 0
            shown[place].time = 0
            shown[place].value = 0.0
