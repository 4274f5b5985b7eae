"""The sentence of a signal: what, how much, since when, in plant words."""

from collections.abc import Sequence
from math import floor, isnan, log10
from typing import Final

from quietmill.instant import format_time
from quietmill.model import Direction, Ended, Rule

__all__ = ["episode_returned", "rounded", "rule_joined", "signal_raised"]

DAY: Final = 86_400_000_000
MOST_DECIMALS: Final = 12

MEANING: Final = {
    Rule.BEYOND_LIMITS: "a point beyond the control limits",
    Rule.SAME_SIDE: "a run of points on one side of the centre",
    Rule.TREND: "a steady rise or fall",
    Rule.ALTERNATING: "points that alternate up and down",
    Rule.TWO_OF_THREE: "two of three points beyond 2 sigma",
    Rule.FOUR_OF_FIVE: "four of five points beyond 1 sigma",
    Rule.STRATIFICATION: "points that hug the centre",
    Rule.MIXTURE: "points that avoid the centre",
    Rule.EWMA: "a moving average beyond its limits",
    Rule.CUSUM: "a small shift that lasts",
    Rule.SPREAD: "a spread beyond its limits",
}


def rounded(value: float, sigma: float) -> str:
    """Return a value with as many decimals as its sigma is worth: down to a twentieth of it, or so.

    >>> rounded(249.10000000000002, 2.0), rounded(246.0, 2.0), rounded(0.0312449, 0.004), rounded(1.2e7, 3e5)
    ('249.1', '246', '0.0312', '12000000')
    """
    decimals = min(max(1 - floor(log10(sigma)), 0), MOST_DECIMALS)
    text = f"{value:.{decimals}f}"
    if "." in text:
        text = text.rstrip("0").rstrip(".")
    return "0" if text == "-0" else text


def with_unit(value: float, sigma: float, unit: str | None) -> str:
    """Return a rounded value with its unit."""
    return rounded(value, sigma) if unit is None else f"{rounded(value, sigma)} {unit}"


def moment(time: int, beside: int) -> str:
    """Return a time as hours, with the day where it is another one than that of `beside`."""
    text = format_time(time).removesuffix("Z").split(".")[0]
    day, _, hours = text.partition("T")
    return hours if time // DAY == beside // DAY else f"{day} {hours}"


def names(rules: Sequence[Rule]) -> str:
    """Return the rules as they are written."""
    return ", ".join(rule.label for rule in rules)


def condition(direction: Direction, rules: Sequence[Rule]) -> str:
    """Return how a characteristic is, by direction; without one, by what its rules mean."""
    if set(rules) == {Rule.SPREAD}:
        return "scatters more than usual" if direction == Direction.HIGH else "scatters less than usual"
    match direction:
        case Direction.HIGH:
            return "is high"
        case Direction.LOW:
            return "is low"
        case Direction.BOTH:
            return "swings both ways"
        case _:
            return f"shows {MEANING[rules[0]]}"


def signal_raised(
    characteristic: str,
    unit: str | None,
    rules: Sequence[Rule],
    direction: Direction,
    favourable: bool,
    value: float,
    centre: float,
    sigma: float,
    lower: float,
    upper: float,
    shift: float,
    onset: int,
    time: int,
) -> str:
    """Return the sentence of a raised signal.

    `value` to `shift` in the characteristic's unit, NaN where there is none; `onset` and `time` in microseconds.
    """
    beside = f"centre {with_unit(centre, sigma, unit)}"
    if Rule.BEYOND_LIMITS in rules and value > upper:
        beside = f"upper control limit {with_unit(upper, sigma, unit)}"
    elif Rule.BEYOND_LIMITS in rules and value < lower:
        beside = f"lower control limit {with_unit(lower, sigma, unit)}"
    what = f"{characteristic} {condition(direction, rules)}: {with_unit(value, sigma, unit)}, {beside} ({names(rules)})"
    if isnan(shift):
        since = f"since {moment(onset, time)}"
    else:
        way = "up" if shift > 0 else "down"
        since = f"{way} by about {with_unit(abs(shift), sigma, unit)} since {moment(onset, time)}"
    return f"{what}; {since}{', which is good news' if favourable else ''}"


def rule_joined(
    characteristic: str,
    unit: str | None,
    joined: Sequence[Rule],
    direction: Direction,
    value: float,
    sigma: float,
    raised: int,
    time: int,
) -> str:
    """Return the sentence of rules that joined an open signal, raised at `raised`."""
    meanings = " and ".join(MEANING[rule] for rule in joined)
    side = "" if direction in {Direction.NONE, Direction.BOTH} else f", {direction.label}"
    return (
        f"{characteristic} also shows {meanings} ({names(joined)}{side}), "
        f"now at {with_unit(value, sigma, unit)}; signal of {moment(raised, time)} goes on"
    )


def episode_returned(characteristic: str, ended: Ended, quiet_points: int, raised: int, time: int) -> str:
    """Return the sentence of a signal that is over."""
    since = f"signal of {moment(raised, time)}"
    match ended:
        case Ended.QUIET:
            return f"{characteristic} is quiet again: no rule has held for {quiet_points} points; {since} is over"
        case Ended.RESTART:
            return f"{characteristic} starts afresh after a correction; {since} is over"
        case Ended.RELOAD:
            return f"{characteristic} starts afresh under new settings; {since} is over"
        case Ended.REMOVED:
            return f"{characteristic} is no longer watched; {since} is over"
        case _:
            return f"{characteristic} is out of service; {since} is over"
