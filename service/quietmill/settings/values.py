"""Single values of the settings file: durations, topics, pointers, rules. Each refuses with a remedy."""

import re
import unicodedata
from typing import Annotated, Any, Final

from pydantic import AfterValidator, BeforeValidator, Field, PlainSerializer, PlainValidator

from quietmill.model import COUNTS, NELSON, Rule
from quietmill.settings.problems import nearest, shown

__all__ = ["Duration", "Identifier", "NotYet", "Number", "Pointer", "Rules", "Size", "Text", "Topic", "in_topics"]

DURATION: Final = re.compile(r"([0-9]+(?:\.[0-9]+)?) *(s|m|h|d)")
SIZE: Final = re.compile(r"([0-9]+(?:\.[0-9]+)?) *(kB|MB|GB|TB)")
BYTES: Final = {"kB": 10**3, "MB": 10**6, "GB": 10**9, "TB": 10**12}
SECONDS: Final = {"s": 1, "m": 60, "h": 3600, "d": 86400}
IDENTIFIER: Final = re.compile(r"[A-Za-z0-9_-][A-Za-z0-9._-]{0,127}")
POINTER: Final = re.compile(r"(?:/(?:[^~/]|~[01])*)*")
WILDCARDS: Final = "+#"
MAX_TOPIC_BYTES: Final = 65_535
LONGEST: Final = 36_500 * 86_400


def parse_duration(value: Any) -> int:
    """Return a duration in microseconds.

    >>> parse_duration("1.5m")
    90000000
    """
    match = DURATION.fullmatch(value) if isinstance(value, str) else None
    if match is None:
        raise ValueError(f"must be a number and s, m, h or d, such as 60s, is {shown(value)}")
    seconds = float(match.group(1)) * SECONDS[match.group(2)]
    microseconds = round(seconds * 1_000_000) if seconds <= LONGEST else 0
    if microseconds < 1:
        raise ValueError(f"must be longer than 0 and at most 36500d, is {shown(value)}")
    return microseconds


def parse_size(value: Any) -> int:
    """Return a size on disk in bytes.

    >>> parse_size("10GB")
    10000000000
    """
    match = SIZE.fullmatch(value) if isinstance(value, str) else None
    if match is None or not float(match.group(1)):
        raise ValueError(f"must be a number and kB, MB, GB or TB, such as 10GB, is {shown(value)}")
    return round(float(match.group(1)) * BYTES[match.group(2)])


def text(value: Any) -> str:
    if not isinstance(value, str):
        remedy = "; put it in quotes" if isinstance(value, (bool, int, float)) else ""
        raise ValueError(f"must be text, is {shown(value)}{remedy}")
    if "\0" in value or any("\ud800" <= character <= "\udfff" for character in value):
        raise ValueError(f"must not hold NUL or half a surrogate pair, is {shown(value)}")
    return value


def identifier(value: Any) -> str:
    if not isinstance(value, str) or not IDENTIFIER.fullmatch(value):
        raise ValueError(f"must be 1 to 128 of A-Z a-z 0-9 . _ - and not begin with a dot, is {shown(value)}")
    return value


def in_topics(value: Any) -> str:
    """Return text that an exact topic may hold; brokers hang up on one that holds anything else."""
    name = text(value)
    if not name:
        raise ValueError("must not be empty")
    if any(sign in name for sign in WILDCARDS):
        raise ValueError(f"must not hold + or #, is {shown(name)}")
    if any(unicodedata.category(character) == "Cc" for character in name):
        raise ValueError(f"must not hold control characters, is {shown(name)}")
    if name.startswith("$"):
        raise ValueError(f"must not begin with $, which is the broker's own, is {shown(name)}")
    return name


def topic(value: Any) -> str:
    if isinstance(value, str) and any(sign in value for sign in WILDCARDS):
        raise ValueError(f"must not hold + or #, is {shown(value)}; a family names many topics")
    name = in_topics(value)
    if len(name.encode()) > MAX_TOPIC_BYTES:
        raise ValueError("is longer than MQTT allows (65,535 bytes)")
    return name


def pointer(value: Any) -> str:
    if not isinstance(value, str) or not POINTER.fullmatch(value):
        remedy = f"; write '/{value}'" if isinstance(value, str) and POINTER.fullmatch("/" + value) else ""
        raise ValueError(f"must be a JSON Pointer (RFC 6901) such as /force or /data/0/v, is {shown(value)}{remedy}")
    return value


NAMES: Final = {rule.label: rule for rule in NELSON}
SETS: Final[dict[str, dict[Rule, float]]] = {
    "nelson": {rule: COUNTS[rule][0] if rule in COUNTS else 0 for rule in NELSON},
    "western_electric": {Rule.BEYOND_LIMITS: 3, Rule.TWO_OF_THREE: 0, Rule.FOUR_OF_FIVE: 0, Rule.SAME_SIDE: 8},
}


def rule_of(item: Any) -> tuple[Rule, float]:
    """Return the rule and number of one entry of a list of rules."""
    name, number = item, None
    if isinstance(item, dict) and len(item) == 1:
        name, number = next(iter(item.items()))
    if not isinstance(name, str):
        raise ValueError(f"each must be a rule's name or {{name: number}}, is {shown(item)}")
    if name in SETS:
        raise ValueError(f"{name} is a whole set; write rules: {name}")
    if name not in NAMES:
        if name in {"ewma", "cusum", "spread"}:
            raise ValueError(f"{name} is no entry of rules but a key of its own")
        raise ValueError(f"there is no rule {shown(name)}{nearest(name, NAMES)}")
    rule = NAMES[name]
    if rule not in COUNTS:
        if number is not None:
            raise ValueError(f"{name} takes no number")
        return rule, 0
    default, least, most = COUNTS[rule]
    number = default if number is None else number
    whole = rule is not Rule.BEYOND_LIMITS
    fits = isinstance(number, (int, float)) and not isinstance(number, bool) and least <= number <= most
    if not fits or (whole and number != int(number)):
        kind = "a whole number" if whole else "a number"
        raise ValueError(f"{name} takes {kind} from {least:g} to {most:g}, has {shown(number)}")
    return rule, number


def rules_of(value: Any) -> Any:
    """Return the items of a list of rules, or of the set that a name stands for."""
    if isinstance(value, str):
        if value not in SETS:
            raise ValueError(f"there is no set of rules {shown(value)}{nearest(value, SETS)}")
        return tuple({rule.label: number} if rule in COUNTS else rule.label for rule, number in SETS[value].items())
    if not isinstance(value, (list, tuple)):
        raise ValueError(f"must be nelson, western_electric or a list of rules, is {shown(value)}")
    return tuple(value)


def each_once(chosen: tuple[tuple[Rule, float], ...]) -> tuple[tuple[Rule, float], ...]:
    """Refuse a rule that stands twice."""
    for place, (rule, _) in enumerate(chosen):
        if rule in dict(chosen[:place]):
            raise ValueError(f"{rule.label} stands twice")
    return chosen


def not_yet(_value: Any) -> None:
    raise ValueError("is not supported yet; leave it out")


def duration_text(microseconds: int) -> str:
    """Return a duration as a settings file would write it."""
    return f"{microseconds / 1e6:.6f}s"


def rule_text(rule: tuple[Rule, float]) -> Any:
    """Return a rule as a settings file would write it."""
    return {rule[0].label: rule[1]} if rule[0] in COUNTS else rule[0].label


Duration = Annotated[int, PlainValidator(parse_duration), PlainSerializer(duration_text, when_used="json")]
"""Microseconds."""
Size = Annotated[int, PlainValidator(parse_size)]
"""Bytes."""
Number = Annotated[float, Field(ge=-1e150, le=1e150)]
"""A number whose square is still finite."""
Text = Annotated[str, BeforeValidator(text)]
Identifier = Annotated[str, PlainValidator(identifier)]
Topic = Annotated[str, PlainValidator(topic)]
Pointer = Annotated[str, PlainValidator(pointer)]
Rules = Annotated[
    tuple[
        Annotated[
            tuple[Rule, float], PlainValidator(rule_of), PlainSerializer(rule_text, return_type=Any, when_used="json")
        ],
        ...,
    ],
    BeforeValidator(rules_of),
    AfterValidator(each_once),
]
"""Rules with their numbers, 0 for those without one."""
NotYet = Annotated[None, PlainValidator(not_yet)]
"""A key that is known but refused, rather than accepted and ignored."""
