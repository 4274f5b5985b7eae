"""The sentence of an event: what, how much, since when, in plant words."""

from collections.abc import Sequence
from math import floor, isnan, log10
from typing import Final, NamedTuple

from quietmill.instant import format_time
from quietmill.model import HIGH, LEVEL_RULES, LOW, Direction, Ended, Rule, direction_of, rule_bits, rules_in

__all__ = ["Shown", "episode_returned", "rounded", "rule_joined", "signal_raised"]

DAY: Final = 86_400_000_000
WRITTEN_OUT: Final = 1e9
"""From here on the digits left of the decimal point that sigma does not vouch for are left to a power of ten."""
MOST_DIGITS: Final = 15
"""More than these a float does not hold for certain."""
FINEST: Final = 9
"""How many further decimals may tell a value from its limit: beyond 1e-9 sigma it lies on it."""

LEVEL: Final = sum(rule_bits(rule, HIGH | LOW) for rule in LEVEL_RULES)
"""The bits of rules that speak of the level."""

SAYS: Final = {
    Rule.BEYOND_LIMITS: ("leaves its control limits", "leaves its control limits"),
    Rule.SAME_SIDE: ("stays above its centre", "stays below its centre"),
    Rule.TREND: ("keeps rising", "keeps falling"),
    Rule.ALTERNATING: ("goes up and down by turns", ""),
    Rule.TWO_OF_THREE: ("is often far above its centre", "is often far below its centre"),
    Rule.FOUR_OF_FIVE: ("is mostly well above its centre", "is mostly well below its centre"),
    Rule.STRATIFICATION: ("stays unusually close to its centre", ""),
    Rule.MIXTURE: ("keeps away from its centre", ""),
    Rule.EWMA: ("is high on average", "is low on average"),
    Rule.CUSUM: ("has been high for a while", "has been low for a while"),
    Rule.SPREAD: ("scatters more than usual", "scatters less than usual"),
}
"""What a rule says of a characteristic: on the high side (or on none), on the low side."""


class Shown(NamedTuple):
    """The point that a sentence shows: all in `unit`, NaN where there is nothing; `time` in microseconds."""

    unit: str | None
    time: int
    value: float
    centre: float
    sigma: float
    lower: float
    upper: float
    spread: float
    spread_lower: float
    spread_upper: float


def rounded(value: float, sigma: float, further: int = 0) -> str:
    """Return a value with as many decimals as its sigma is worth: down to a tenth of it or finer; and `further` ones.

    >>> rounded(249.10000000000002, 2.0), rounded(246.0, 2.0), rounded(0.0312449, 0.004), rounded(1.2e7, 3e5)
    ('249.1', '246', '0.0312', '12000000')
    >>> rounded(3.217e-9, 1e-9), rounded(6.0221e23, 1e20)
    ('3.2e-9', '6.0221e23')
    """
    decimals = 1 - floor(log10(sigma)) + further
    if abs(value) < WRITTEN_OUT:
        decimals = max(decimals, 0)
    value = round(value, decimals)
    if value == 0:
        return "0"
    # By significant digits, which writes a power of ten only where there would be a long row of zeros.
    digits = floor(log10(abs(value))) + 1 + decimals
    text = f"{value:.{min(digits, MOST_DIGITS)}g}"
    if "e" not in text:
        return text
    mantissa, _, power = text.partition("e")
    return f"{mantissa}e{int(power)}"


def signal_raised(name: str, started: int, favourable: bool, shift: float, onset: int, shown: Shown) -> str:
    """Return the sentence of a raised signal.

    `started` are the rule bits that hold, `shift` is in the unit (NaN where the rules say nothing of a level), `onset`
    in microseconds.
    """
    what = f"{name} {condition(started)}: {evidence(started, shown)} ({names(started)})"
    since = f"since {moment(onset, shown.time)}"
    if isnan(shift):
        what = f"{what}, {since}"
    else:
        way = "up" if shift > 0 else "down"
        what = f"{what}; {way} by about {with_unit(about(abs(shift), shown.sigma), shown.unit)} {since}"
    return f"{what}; this is good news" if favourable else what


def rule_joined(name: str, joined: int, raised: int, shown: Shown) -> str:
    """Return the sentence of rules (`joined`, as bits) that join an open signal, raised at `raised`."""
    says = in_words([words for rule in rules_in(joined) for words in says_of(rule, joined)])
    since = moment(raised, shown.time)
    return f"{name} now also {says}: {evidence(joined, shown)} ({names(joined)}); joins the signal of {since}"


def episode_returned(name: str, ended: Ended, quiet_points: int, raised: int, shown: Shown) -> str:
    """Return the sentence of a signal that is over."""
    over = f"the signal of {moment(raised, shown.time)} is over"
    match ended:
        case Ended.QUIET:
            points = "1 point" if quiet_points == 1 else f"{quiet_points} points"
            value = with_unit(rounded(shown.value, shown.sigma), shown.unit)
            return f"{name} is quiet again at {value}: no rule has held for {points}; {over}"
        case Ended.RESTART:
            return f"{name} starts afresh after a correction; {over}"
        case Ended.RELOAD:
            return f"{name} starts afresh under new settings; {over}"
        case Ended.REMOVED:
            return f"{name} is no longer watched; {over}"
        case _:
            return f"{name} is out of service; {over}"


def condition(started: int) -> str:
    """Return how a characteristic is: by its level, else by its movement, its spread or its pattern."""
    level = direction_of(started & LEVEL)
    if level is Direction.BOTH:
        return "swings high and low"
    if level is not Direction.NONE:
        at_once = started & rule_bits(Rule.BEYOND_LIMITS, HIGH | LOW)
        return f"{'is' if at_once else 'runs'} {level.label}"
    return in_words([words for rule in rules_in(started) for words in says_of(rule, started)])


def says_of(rule: Rule, bits: int) -> list[str]:
    """Return what a rule says, for each direction in which it holds."""
    return [words for words, side in zip(SAYS[rule], (HIGH, LOW), strict=True) if bits & rule_bits(rule, side)]


def evidence(bits: int, shown: Shown) -> str:
    """Return the number that speaks for itself, beside what it should be."""
    beyond = direction_of(bits & rule_bits(Rule.BEYOND_LIMITS, HIGH | LOW))
    if beyond is Direction.HIGH:
        return compared("", shown.value, "upper control limit", shown.upper, shown)
    if beyond is Direction.LOW:
        return compared("", shown.value, "lower control limit", shown.lower, shown)
    if rules_in(bits) == [Rule.SPREAD]:
        if direction_of(bits) is Direction.HIGH:
            return compared("spread ", shown.spread, "upper spread limit", shown.spread_upper, shown)
        return compared("spread ", shown.spread, "lower spread limit", shown.spread_lower, shown)
    level = direction_of(bits & LEVEL)
    other_side = {Direction.HIGH: shown.value < shown.centre, Direction.LOW: shown.value > shown.centre}
    back = "now back at " if other_side.get(level) else ""
    return compared(back, shown.value, "centre", shown.centre, shown)


def compared(what: str, value: float, beside: str, limit: float, shown: Shown) -> str:
    """Return a value and what it is compared with, with so many decimals that they differ if they do."""
    further = 0
    while value != limit and further < FINEST and same(value, limit, shown.sigma, further):
        further += 1
    first, second = rounded(value, shown.sigma, further), rounded(limit, shown.sigma, further)
    return f"{what}{with_unit(first, shown.unit)}, {beside} {with_unit(second, shown.unit)}"


def same(value: float, limit: float, sigma: float, further: int) -> bool:
    return rounded(value, sigma, further) == rounded(limit, sigma, further)


def about(shift: float, sigma: float) -> str:
    """Return a shift as a value is written, with two digits at least."""
    return rounded(shift, min(sigma, shift))


def with_unit(text: str, unit: str | None) -> str:
    return text if unit is None else f"{text} {unit}"


def moment(time: int, beside: int) -> str:
    """Return a time to the second, with the day where it is another one than that of `beside`."""
    day, _, clock = format_time(time - time % 1_000_000).removesuffix("Z").partition("T")
    return clock if time // DAY == beside // DAY else f"{day} {clock}"


def names(bits: int) -> str:
    return ", ".join(rule.label for rule in rules_in(bits))


def in_words(parts: Sequence[str]) -> str:
    """Return parts as a list in a sentence.

    >>> in_words(["rises"]), in_words(["rises", "swings", "sticks"])
    ('rises', 'rises, swings and sticks')
    """
    return " and ".join([", ".join(parts[:-1]), parts[-1]] if len(parts) > 1 else parts)
