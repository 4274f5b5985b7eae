"""The charts again, slow and exact: fractions instead of floats, every window looked at afresh at every point.

Written from the definitions (Western Electric 1956, Nelson 1984, Page 1954, Roberts 1959, Samuel, Pignatiello and
Calvin 1998), without state that is carried along; only EWMA, CUSUM and episodes are recursions by definition.
"""

import itertools
from collections.abc import Sequence
from dataclasses import dataclass, field
from fractions import Fraction
from math import inf, pi, sqrt

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


def averages(z: Sequence[Fraction], detector: Detector) -> list[tuple[Fraction, set[tuple[Rule, int]]]]:
    """Return the EWMA of z at every point and whether it holds; squares are compared, so that no root is taken."""
    if detector.ewma is None:
        return [(Fraction(0), set())] * len(z)
    lam, width = exact(detector.ewma.lam), exact(detector.ewma.width)
    average, found = Fraction(0), []
    for t, value in enumerate(z, start=1):
        average = lam * value + (1 - lam) * average
        square = width**2 * lam / (2 - lam) * (1 - (1 - lam) ** (2 * t) if detector.ewma.exact else 1)
        beyond = average**2 > square
        found.append((average, {(Rule.EWMA, HIGH if average > 0 else LOW)} if beyond else set()))
    return found


def arm(z: Sequence[Fraction], detector: Detector, side: int) -> list[tuple[Fraction, set[tuple[Rule, int]]]]:
    """Return one arm of the CUSUM of z at every point and whether it holds."""
    cusum = detector.cusum
    if cusum is None:
        return [(Fraction(0), set())] * len(z)
    k, h, total = exact(cusum.k), exact(cusum.h), exact(cusum.head_start)
    found = []
    for value in z:
        total = max(Fraction(0), total + (value if side == HIGH else -value) - k)
        beyond = total > h
        if cusum.ceiling < inf:
            total = min(total, exact(cusum.ceiling) * h)
        found.append((total, {(Rule.CUSUM, side)} if beyond else set()))
    return found


def judge(values: Sequence[float], detector: Detector, times: Sequence[int] | None = None) -> list[Point]:
    """Return what a detector says of a series, point by point. `times` in microseconds matter for gaps only."""
    centre, sigma = exact(detector.centre), exact(detector.sigma)
    z = [(exact(value) - centre) / sigma for value in values]
    sides = {"both": HIGH | LOW, "high": HIGH, "low": LOW}[detector.side]
    arms = {side: arm(z, detector, side) for side in (HIGH, LOW)}
    points: list[Point] = []
    begin = 0
    for place, (average, beyond_average) in enumerate(averages(z, detector)):
        if place and detector.gap and times and times[place] - times[place - 1] > detector.gap:
            begin = place
        spread = abs(z[place] - z[place - 1]) if place > begin else None
        holds = rules_at(z[begin : place + 1], detector)
        holds |= beyond_average | arms[HIGH][place][1] | arms[LOW][place][1]
        if detector.spread_signals and spread is not None and spread > SPREAD_UPPER:
            holds.add((Rule.SPREAD, HIGH))
        holds = {(rule, side) for rule, side in holds if rule in UNDIRECTED or side & sides}
        points.append(Point(holds, z[place], average, arms[HIGH][place][0], arms[LOW][place][0], spread))
    follow(points, detector)
    return points


def follow(points: list[Point], detector: Detector) -> None:
    """Write what the episode does at every point."""
    returned = quiet = 0
    episode: Point | None = None  # the point that raised the open one
    members: list[tuple[Rule, int]] = []
    for number, point in enumerate(points, start=1):
        if point.holds and episode is None:
            point.notice, point.raised, members, episode = "RAISED", number, [], point
            date(points[:number], detector, returned)
        if episode is not None:
            quiet = 0 if point.holds else quiet + 1
            point.joined = point.holds - set(members)
            members = members + sorted(point.joined)
            point.members = members
            point.raised, point.onset, point.shift_sigma = episode.raised, episode.onset, episode.shift_sigma
            if point.joined and not point.notice:
                point.notice = "JOINED"
            if quiet == detector.quiet_points:
                point.notice, episode, returned = "RETURNED", None, number


def date(points: Sequence[Point], detector: Detector, returned: int) -> None:
    """Write the onset of a signal raised at the last of the points, and its size in sigmas.

    `returned` is the number of the point at which the last episode returned. Every point may be the first after the
    change, from the last of: the first kept, the first after `returned`, and for a CUSUM alone the first after its
    arm's zero. Where that is older than the points kept, the arm itself tells, unless an episode returned since.
    """
    point, number = points[-1], len(points)
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
    candidates = range(max(oldest, returned + 1), number + 1)
    if rule is Rule.CUSUM:
        sums = [each.high if side == HIGH else each.low for each in points]
        zero = max((place for place, total in enumerate(sums, start=1) if total == 0), default=0)
        if returned <= zero < oldest - 1:
            candidates = range(zero + 1, zero + 2)
        else:
            candidates = range(max(candidates.start, zero + 1), number + 1)
    best = Fraction(-1)
    for onset in candidates:
        since = points[onset - 1 :]
        mean = sum((each.z for each in since), Fraction(0)) / len(since)
        if (mean > 0) == (side == HIGH) and mean**2 * len(since) >= best:
            best, point.onset, point.shift_sigma = mean**2 * len(since), onset, mean
