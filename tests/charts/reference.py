"""The charts again, slow and exact: fractions instead of floats, every window looked at afresh at every point.

Written from the definitions (Western Electric 1956, Nelson 1984, Page 1954, Roberts 1959, Samuel, Pignatiello and
Calvin 1998), without state that is carried along; only EWMA, CUSUM and episodes are recursions by definition.
"""

import itertools
from collections.abc import Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from math import pi, sqrt

from quietmill.model import LEVEL_RULES, UNDIRECTED, Detector, Rule

HIGH, LOW = 1, 2
SPREAD_UPPER = 2 / sqrt(pi) + 3 * sqrt(2 - 4 / pi)


def exact(number: float) -> Fraction:
    """Return the decimal fraction that a float was written as."""
    return Fraction(repr(float(number)))


@dataclass
class Point:
    """What holds at a point, and what its episode does."""

    holds: set[tuple[Rule, int]]
    z: Fraction
    ewma: Fraction = Fraction(0)
    high: Fraction = Fraction(0)
    low: Fraction = Fraction(0)
    spread: Fraction | None = None
    notice: str = ""
    joined: set[tuple[Rule, int]] = field(default_factory=set)
    members: list[tuple[Rule, int]] = field(default_factory=list)  # in the order of joining
    raised: int = 0
    onset: int = 0
    shift_sigma: Fraction | None = None


def same_sign(values: Sequence[Fraction], beyond: Fraction = Fraction(0)) -> int:
    if values and all(value > beyond for value in values):
        return HIGH
    return LOW if values and all(value < -beyond for value in values) else 0


def count_beyond(window: Sequence[Fraction], line: int, needed: int) -> int:
    """Return the side on which the last of a window and enough of its points lie beyond a line."""
    for side, sign in ((HIGH, 1), (LOW, -1)):
        if window[-1] * sign > line and sum(value * sign > line for value in window) >= needed:
            return side
    return 0


def rules_at(z: Sequence[Fraction], detector: Detector) -> set[tuple[Rule, int]]:
    """Return which run rules hold at the last of the points since the last gap."""
    rules, found = detector.rules, {}

    def last(count: int) -> Sequence[Fraction]:
        return z[-count:] if len(z) >= count else ()

    found[Rule.BEYOND_LIMITS] = same_sign(z[-1:], exact(detector.width))
    found[Rule.SAME_SIDE] = same_sign(last(int(rules.get(Rule.SAME_SIDE, 9))))
    six = last(6)
    found[Rule.TREND] = same_sign([b - a for a, b in itertools.pairwise(six)])
    fourteen = last(14)
    steps = [b - a for a, b in itertools.pairwise(fourteen)]
    found[Rule.ALTERNATING] = HIGH if steps and all(a * b < 0 for a, b in itertools.pairwise(steps)) else 0
    found[Rule.TWO_OF_THREE] = count_beyond(z[-3:], 2, 2)
    found[Rule.FOUR_OF_FIVE] = count_beyond(z[-5:], 1, 4)
    within = last(int(rules.get(Rule.STRATIFICATION, 15)))
    found[Rule.STRATIFICATION] = HIGH if within and all(abs(value) < 1 for value in within) else 0
    outside = last(int(rules.get(Rule.MIXTURE, 8)))
    found[Rule.MIXTURE] = HIGH if outside and all(abs(value) > 1 for value in outside) else 0
    return {(rule, side) for rule, side in found.items() if side and rule in rules}


def beyond_ewma(average: Fraction, t: int, detector: Detector) -> int:
    """Compare squares, so that no root has to be taken."""
    assert detector.ewma is not None
    lam, width = exact(detector.ewma.lam), exact(detector.ewma.width)
    square = width**2 * lam / (2 - lam) * (1 - (1 - lam) ** (2 * t) if detector.ewma.exact else 1)
    if average**2 <= square:
        return 0
    return HIGH if average > 0 else LOW


def judge(values: Sequence[float], detector: Detector, times: Sequence[int] | None = None) -> list[Point]:
    """Return what a detector says of a series, point by point. `times` in microseconds matter for gaps only."""
    centre, sigma = exact(detector.centre), exact(detector.sigma)
    x = [exact(value) for value in values]
    z = [(value - centre) / sigma for value in x]
    points: list[Point] = []
    average = Fraction(0)
    cusum = detector.cusum
    high = low = exact(cusum.head_start) if cusum else Fraction(0)
    zero = {HIGH: 0, LOW: 0}  # number of the last point at which an arm was zero
    returned = quiet = 0
    episode: Point | None = None  # the point that raised the open one
    members: list[tuple[Rule, int]] = []
    begin = 0
    for place in range(len(z)):
        number = place + 1
        if place and detector.gap and times and times[place] - times[place - 1] > detector.gap:
            begin = place
        holds = rules_at(z[begin : place + 1], detector)
        if detector.ewma is not None:
            lam = exact(detector.ewma.lam)
            average = lam * z[place] + (1 - lam) * average
            holds |= {(Rule.EWMA, side)} if (side := beyond_ewma(average, number, detector)) else set()
        if cusum is not None:
            k, h = exact(cusum.k), exact(cusum.h)
            cap = exact(cusum.ceiling) * h if cusum.ceiling != float("inf") else None
            high, low = max(Fraction(0), high + z[place] - k), max(Fraction(0), low - z[place] - k)
            holds |= ({(Rule.CUSUM, HIGH)} if high > h else set()) | ({(Rule.CUSUM, LOW)} if low > h else set())
            high, low = (high, low) if cap is None else (min(high, cap), min(low, cap))
            zero[HIGH] = number if high == 0 else zero[HIGH]
            zero[LOW] = number if low == 0 else zero[LOW]
        spread = abs(z[place] - z[place - 1]) if place > begin else None
        if detector.spread_signals and spread is not None:
            holds |= {(Rule.SPREAD, HIGH)} if spread > SPREAD_UPPER else set()
        side = {"both": HIGH | LOW, "high": HIGH, "low": LOW}[detector.side]
        holds = {(rule, way) for rule, way in holds if rule in UNDIRECTED or way & side}
        point = Point(holds, z[place], average, high, low, spread)
        if holds and episode is None:
            point.notice, point.raised, members, episode = "RAISED", number, [], point
            date(point, z, number, detector, returned, zero)
        if episode is not None:
            quiet = 0 if holds else quiet + 1
            point.joined = holds - set(members)
            members = members + sorted(point.joined)
            point.members = members
            point.raised, point.onset, point.shift_sigma = episode.raised, episode.onset, episode.shift_sigma
            if point.joined and not point.notice:
                point.notice = "JOINED"
            if quiet == detector.quiet_points:
                point.notice, episode, returned = "RETURNED", None, number
        points.append(point)
    return points


def date(
    point: Point, z: Sequence[Fraction], number: int, detector: Detector, returned: int, zero: dict[int, int]
) -> None:
    """Write the onset of a signal raised at point `number`, and its size in sigmas.

    `returned` is the number of the point at which the last episode returned, `zero` that of the last zero of each arm.
    Every point may be the first after the change, from the last of: the first kept, the first after `returned`, and
    for a CUSUM alone the first after its arm's zero. Where that is older than the points kept, the arm itself tells,
    unless an episode returned since.
    """
    oldest = max(1, number - detector.points_kept + 1)
    levels = sorted((rule, side) for rule, side in point.holds if rule in LEVEL_RULES)
    if not levels:
        windows = {
            Rule.TREND: 6,
            Rule.ALTERNATING: 14,
            Rule.STRATIFICATION: int(detector.rules.get(Rule.STRATIFICATION, 15)),
            Rule.MIXTURE: int(detector.rules.get(Rule.MIXTURE, 8)),
            Rule.SPREAD: 2,
        }
        first = min(rule for rule, _ in point.holds)
        point.onset = max(oldest, number - windows[first] + 1)
        return
    rule, side = levels[0]
    sign = 1 if side == HIGH else -1
    earliest = max(oldest, returned + 1)
    if rule is Rule.CUSUM:
        if zero[side] + 1 < oldest and zero[side] >= returned:
            point.onset = zero[side] + 1
            point.shift_sigma = sum(z[point.onset - 1 : number], Fraction(0)) / (number - point.onset + 1)
            return
        earliest = max(earliest, zero[side] + 1)
    best: tuple[Fraction, int] | None = None
    for onset in range(earliest, number + 1):
        total = sum(z[onset - 1 : number], Fraction(0))
        count = number - onset + 1
        if total * sign > 0 and (best is None or total**2 / count >= best[0]):
            best = (total**2 / count, onset)
    point.onset = best[1] if best else number
    point.shift_sigma = sum(z[point.onset - 1 : number], Fraction(0)) / (number - point.onset + 1)
