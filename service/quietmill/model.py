"""The nouns that every room shares: readings, points and notices as arrays; rules, outcomes and detectors.

Nothing here does I/O, reads a clock or imports another module of the package. Time is integer microseconds
UTC everywhere inside; text appears only at the edges.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import IntEnum
from math import isfinite
from types import MappingProxyType
from typing import Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "HIGH",
    "LOW",
    "NOTICE",
    "NO_TIME",
    "OUT_OF_RANGE_SIGMAS",
    "POINT",
    "READING",
    "RECENT",
    "RECENT_POINTS",
    "Cusum",
    "Detector",
    "Direction",
    "Ended",
    "Ewma",
    "Notice",
    "Outcome",
    "Rule",
    "Verdicts",
    "direction_of",
    "rule_bits",
    "rules_in",
]

Records = NDArray[np.void]
"""A structured array: one record an element."""

NO_TIME: Final = -(2**63)
"""Stands in an integer time or sequence that is not there."""


class Outcome(IntEnum):
    """What became of one reading (or of one message, where no reading could be told)."""

    ACCEPTED = 0
    LATE = 1
    REPEATED = 2
    FUTURE = 3
    RETAINED = 4
    NOT_JSON = 5
    NO_MEMBER = 6
    NOT_A_NUMBER = 7
    OUT_OF_RANGE = 8
    BAD_TIME = 9
    BAD_SIZE = 10
    INCOMPLETE = 11
    OUT_OF_SERVICE = 12
    TOO_LARGE = 13
    UNROUTED = 14

    @property
    def label(self) -> str:
        """The outcome as metrics, logs and tables write it."""
        return self.name.lower()


OUT_OF_RANGE_SIGMAS: Final = 1e9
"""Farther from the centre a value is no measurement, and would swamp every sum it enters."""


class Rule(IntEnum):
    """The rules, in the order of the table in which events name them."""

    BEYOND_LIMITS = 0
    SAME_SIDE = 1
    TREND = 2
    ALTERNATING = 3
    TWO_OF_THREE = 4
    FOUR_OF_FIVE = 5
    STRATIFICATION = 6
    MIXTURE = 7
    EWMA = 8
    CUSUM = 9
    SPREAD = 10

    @property
    def label(self) -> str:
        """The rule as settings, events and metrics write it."""
        return self.name.lower()


class Direction(IntEnum):
    """Where a signal points."""

    NONE = 0
    HIGH = 1
    LOW = 2
    BOTH = 3

    @property
    def label(self) -> str:
        """The direction as events write it."""
        return self.name.lower()


UNDIRECTED: Final = frozenset({Rule.ALTERNATING, Rule.STRATIFICATION, Rule.MIXTURE})
"""Rules that hold without pointing anywhere; theirs is the high bit of their pair."""

LEVEL_RULES: Final = frozenset(
    {Rule.BEYOND_LIMITS, Rule.SAME_SIDE, Rule.TWO_OF_THREE, Rule.FOUR_OF_FIVE, Rule.EWMA, Rule.CUSUM}
)
"""Rules that speak of the level, whose onset is a change point of the mean."""

HIGH: Final = 1
LOW: Final = 2
"""What a rule's function answers; shifted left by twice the rule's number, its pair in a word of rule bits."""


def rule_bits(rule: Rule, direction: int = HIGH) -> int:
    """Return the bit of one rule and direction (`HIGH` or `LOW`) in a word of rule bits."""
    return direction << (2 * rule)


def rules_in(word: int) -> list[Rule]:
    """Return the rules of a word of rule bits, in the order of the table.

    >>> [rule.label for rule in rules_in(rule_bits(Rule.CUSUM, LOW) | rule_bits(Rule.BEYOND_LIMITS, LOW))]
    ['beyond_limits', 'cusum']
    """
    return [rule for rule in Rule if word >> (2 * rule) & 3]


def direction_of(word: int) -> Direction:
    """Return the common direction of all rules in a word of rule bits.

    >>> direction_of(rule_bits(Rule.CUSUM, LOW) | rule_bits(Rule.MIXTURE)).label
    'low'
    """
    direction = 0
    for rule in rules_in(word):
        if rule not in UNDIRECTED:
            direction |= word >> (2 * rule) & 3
    return Direction(direction)


READING: Final = np.dtype(
    [
        ("row", np.int64),  # which characteristic
        ("message", np.int64),  # readings of one message share it; it grows from message to message
        ("time", np.int64),  # microseconds UTC, the reading's own or that of arrival
        ("arrival", np.int64),  # microseconds UTC, or NO_TIME in data that do not tell
        ("sequence", np.int64),  # the sender's counter, or NO_TIME
        ("value", np.float64),  # after scale and offset, finite
        ("size", np.float64),  # units inspected, for kinds that have one; else 0
        ("subgroup", np.uint64),  # fingerprint of the subgroup's id; else 0
        ("fingerprint", np.uint64),  # of what makes a message of the same time a repeated one
    ]
)
"""One tagged value that passed screening. Readings stand in the order of their arrival."""

POINT: Final = np.dtype(
    [
        ("row", np.int64),
        ("reading", np.int64),  # index into the readings judged, of the reading that completed the point
        ("number", np.int64),  # from 1, never set back
        ("time", np.int64),
        ("bits", np.int64),  # rules that hold at this point
        ("value", np.float64),
        ("centre", np.float64),
        ("sigma", np.float64),  # of the point
        ("z", np.float64),
        ("lower", np.float64),  # control limits, NaN on a side that cannot be reached
        ("upper", np.float64),
        ("spread", np.float64),  # NaN where there is none (yet)
        ("spread_lower", np.float64),
        ("spread_upper", np.float64),
        ("ewma", np.float64),  # in the characteristic's unit, NaN without the rule
        ("cusum_high", np.float64),  # in sigmas, NaN without the rule
        ("cusum_low", np.float64),
    ]
)
"""What is plotted: a reading or a subgroup's statistic, with all that was judged at it."""


class Notice(IntEnum):
    """What an episode did at a point."""

    RAISED = 1
    JOINED = 2
    RETURNED = 3


class Ended(IntEnum):
    """Why an episode returned."""

    NOT_ENDED = 0
    QUIET = 1
    RESTART = 2
    RELOAD = 3
    REMOVED = 4
    OUT_OF_SERVICE = 5

    @property
    def label(self) -> str:
        """The reason as events write it."""
        return self.name.lower()


NOTICE: Final = np.dtype(
    [
        ("kind", np.int64),  # a Notice
        ("ended", np.int64),  # an Ended, with RETURNED
        ("row", np.int64),
        ("point", np.int64),  # index into the points of the same Verdicts
        ("joined", np.int64),  # rule bits that started to hold at this point
        ("members", np.int64),  # rule bits of all that have joined so far
        ("order", np.int64),  # their rules in the order of joining, four bits each (rule + 1), the first lowest
        ("start", np.int64),  # time of the first point since the detector's last start
        ("raised_number", np.int64),  # number and time of the point that raised the episode
        ("raised_time", np.int64),
        ("onset_number", np.int64),
        ("onset_time", np.int64),
        ("shift", np.float64),  # in the characteristic's unit; NaN where the rule says nothing of a level
        ("shift_sigma", np.float64),  # in sigmas of the point
        ("recent", np.int64),  # how many of the notice's row in Verdicts.recent are filled, the last of them its point
    ]
)
"""One change of an episode: the evidence from which an event is written."""

RECENT_POINTS: Final = 25
"""How many points, up to its own, an event shows."""

RECENT: Final = np.dtype([("number", np.int64), ("time", np.int64), ("value", np.float64)])


class Verdicts(NamedTuple):
    """What the bank says of a batch of n readings.

    `outcomes` has shape (n,) and holds an `Outcome` for each reading; `points` (m <= n) and `notices` (k) stand in
    the order in which they arose; `recent` has shape (k, RECENT_POINTS). `set_back` holds the indices of readings by
    which a sender's clock was found set back; they are accepted.
    """

    outcomes: NDArray[np.uint8]
    points: Records
    notices: Records
    recent: Records
    set_back: NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Ewma:
    """An exponentially weighted moving average of z: `lam` its weight on the newest point, `width` its limits' L."""

    lam: float
    width: float
    exact: bool = True

    def __post_init__(self) -> None:
        if not 0 < self.lam <= 1:
            raise ValueError(f"lambda must be greater than 0 and at most 1, is {self.lam}")
        if not (isfinite(self.width) and self.width > 0):
            raise ValueError(f"L must be greater than 0, is {self.width}")


@dataclass(frozen=True, slots=True)
class Cusum:
    """Two cumulative sums of z beyond the allowance `k`, that signal beyond `h`; all in sigmas of the point.

    `head_start` (0 <= head_start < h) is where both start; `ceiling` (at least 1, in multiples of h) is how far a
    sum may grow.
    """

    k: float
    h: float
    head_start: float = 0.0
    ceiling: float = float("inf")

    def __post_init__(self) -> None:
        if not (isfinite(self.k) and self.k >= 0):
            raise ValueError(f"k must be 0 or greater, is {self.k}")
        if not (isfinite(self.h) and self.h > 0):
            raise ValueError(f"h must be greater than 0, is {self.h}")
        if not 0 <= self.head_start < self.h:
            raise ValueError(f"head_start must be at least 0 and less than h, is {self.head_start}")
        if not self.ceiling >= 1:
            raise ValueError(f"ceiling must be at least 1 (times h), is {self.ceiling}")


COUNTS: Final[Mapping[Rule, tuple[float, float, float]]] = MappingProxyType(
    {
        Rule.BEYOND_LIMITS: (3, 2, 8),
        Rule.SAME_SIDE: (9, 2, 30),
        Rule.STRATIFICATION: (15, 2, 50),
        Rule.MIXTURE: (8, 2, 20),
    }
)
"""Rules that take a number: its default, smallest and largest. All but the multiple of `beyond_limits` are whole."""

NELSON: Final = (
    Rule.BEYOND_LIMITS,
    Rule.SAME_SIDE,
    Rule.TREND,
    Rule.ALTERNATING,
    Rule.TWO_OF_THREE,
    Rule.FOUR_OF_FIVE,
    Rule.STRATIFICATION,
    Rule.MIXTURE,
)
"""The eight run rules (Nelson 1984), which a list of rules may name."""


@dataclass(frozen=True, slots=True)
class Detector:
    """All that decides how one characteristic is judged, and nothing else.

    `centre` and `sigma` (of single readings) are the baseline; `rules` maps each run rule that may signal to its
    number (`COUNTS`; 0 for rules without one); `side` is `both`, `high` or `low`; `gap` is in microseconds, 0 for
    none; `timed` and `sequenced` say whether readings bring a time and a counter of their own, and `sequence_size`
    where that counter wraps (0: unknown).
    """

    centre: float
    sigma: float
    kind: str = "individuals"
    rules: Mapping[Rule, float] = field(default_factory=dict[Rule, float])
    ewma: Ewma | None = None
    cusum: Cusum | None = None
    side: str = "both"
    spread_signals: bool = False
    gap: int = 0
    quiet_points: int = 8
    points_kept: int = 64
    timed: bool = True
    sequenced: bool = False
    sequence_size: int = 0

    def __post_init__(self) -> None:
        if not isfinite(self.centre):
            raise ValueError(f"centre must be a finite number, is {self.centre}")
        if not (isfinite(self.sigma) and self.sigma > 0):
            raise ValueError(f"sigma must be greater than 0, is {self.sigma}")
        for rule, number in self.rules.items():
            default, least, most = COUNTS.get(rule, (0, 0, 0))
            if rule not in NELSON or not least <= number <= most or (rule and number != int(number)):
                raise ValueError(
                    f"{rule.label}: number must be from {least} to {most}, is {number} (usually {default})"
                )
        if self.side not in {"both", "high", "low"}:
            raise ValueError(f"side must be both, high or low, is {self.side}")
        if not 1 <= self.points_kept <= 1000:
            raise ValueError(f"points_kept must be from 1 to 1000, is {self.points_kept}")
        if self.quiet_points < 1 or self.gap < 0 or self.sequence_size < 0:
            raise ValueError("quiet_points must be at least 1, gap and sequence_size at least 0")

    @property
    def width(self) -> float:
        """At how many sigma of the point the control limits stand."""
        return self.rules.get(Rule.BEYOND_LIMITS, COUNTS[Rule.BEYOND_LIMITS][0])
