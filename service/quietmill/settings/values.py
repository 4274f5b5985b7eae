"""Single values of the settings file: durations, topics, pointers, rules. Each refuses with a remedy."""

import re
from typing import Annotated, Any, Final

from pydantic import BeforeValidator, PlainValidator

from quietmill.model import COUNTS, NELSON, Rule
from quietmill.settings.problems import nearest

__all__ = ["Duration", "Identifier", "NotYet", "Pointer", "Rules", "Text", "Topic", "parse_duration"]

DURATION: Final = re.compile(r"([0-9]+(?:\.[0-9]+)?) *(s|m|h|d)")
SECONDS: Final = {"s": 1, "m": 60, "h": 3600, "d": 86400}
IDENTIFIER: Final = re.compile(r"[A-Za-z0-9_-][A-Za-z0-9._-]{0,127}")
POINTER: Final = re.compile(r"(?:/(?:[^~/]|~[01])*)*")
MAX_TOPIC_BYTES: Final = 65_535
LONGEST: Final = 36_500 * 86_400


def parse_duration(value: Any) -> int:
    """Return a duration in microseconds.

    >>> parse_duration("1.5m")
    90000000
    """
    match = DURATION.fullmatch(value) if isinstance(value, str) else None
    if match is None:
        raise ValueError(f"must be a number and s, m, h or d, such as 60s, is {value!r}")
    seconds = float(match.group(1)) * SECONDS[match.group(2)]
    if not 0 < seconds <= LONGEST:
        raise ValueError(f"must be longer than 0 and at most 36500d, is {value}")
    return round(seconds * 1_000_000)


def text(value: Any) -> str:
    if not isinstance(value, str):
        raise ValueError(f"must be text, is {value!r}; put it in quotes")
    if "\0" in value:
        raise ValueError("must not hold a NUL character")
    return value


def identifier(value: Any) -> str:
    if not isinstance(value, str) or not IDENTIFIER.fullmatch(value):
        raise ValueError(f"must be 1 to 128 of A-Z a-z 0-9 . _ - and not begin with a dot, is {value!r}")
    return value


def topic(value: Any) -> str:
    name = text(value)
    if not name:
        raise ValueError("must not be empty")
    if "+" in name or "#" in name:
        raise ValueError(f"must be an exact topic without + and #, is {name!r}; a family names many topics")
    if name.startswith("$"):
        raise ValueError(f"must not begin with $, which is the broker's own, is {name!r}")
    if len(name.encode()) > MAX_TOPIC_BYTES:
        raise ValueError("is longer than MQTT allows (65,535 bytes)")
    return name


def pointer(value: Any) -> str:
    if not isinstance(value, str) or not POINTER.fullmatch(value):
        remedy = f"; write '/{value}'" if isinstance(value, str) and POINTER.fullmatch("/" + value) else ""
        raise ValueError(f"must be a JSON Pointer (RFC 6901) such as /force or /data/0/v, is {value!r}{remedy}")
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
        raise ValueError(f"each must be a rule's name or {{name: number}}, is {item!r}")
    if name in SETS:
        raise ValueError(f"{name} is a whole set; write rules: {name}")
    if name not in NAMES:
        if name in {"ewma", "cusum", "spread"}:
            raise ValueError(f"{name} is no entry of rules but a key of its own")
        raise ValueError(f"there is no rule {name!r}{nearest(name, NAMES)}")
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
        raise ValueError(f"{name} takes {kind} from {least:g} to {most:g}, has {number!r}")
    return rule, number


def rules(value: Any) -> dict[Rule, float]:
    """Return the rules of a set's name or a list."""
    if isinstance(value, str):
        if value not in SETS:
            raise ValueError(f"there is no set of rules {value!r}{nearest(value, SETS)}; or write a list of rules")
        return dict(SETS[value])
    if not isinstance(value, list):
        raise ValueError(f"must be nelson, western_electric or a list of rules, is {value!r}")
    chosen: dict[Rule, float] = {}
    for item in value:
        rule, number = rule_of(item)
        if rule in chosen:
            raise ValueError(f"{rule.label} stands twice")
        chosen[rule] = number
    return chosen


def not_yet(_value: Any) -> None:
    raise ValueError("is not supported yet")


Duration = Annotated[int, PlainValidator(parse_duration)]
"""Microseconds."""
Text = Annotated[str, BeforeValidator(text)]
Identifier = Annotated[str, PlainValidator(identifier)]
Topic = Annotated[str, PlainValidator(topic)]
Pointer = Annotated[str, PlainValidator(pointer)]
Rules = Annotated[dict[Rule, float], PlainValidator(rules)]
NotYet = Annotated[None, PlainValidator(not_yet)]
"""A key that is known but refused, rather than accepted and ignored."""
