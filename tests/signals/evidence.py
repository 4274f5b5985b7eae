"""What the bank hands to the herald, made by hand: a press, a point, a notice."""

from collections.abc import Mapping
from typing import Any

import numpy as np

from quietmill.model import (
    HIGH,
    LOW,
    NOTICE,
    POINT,
    RECENT,
    RECENT_POINTS,
    UNDIRECTED,
    Ended,
    Notice,
    Rule,
    Verdicts,
    rule_bits,
)
from quietmill.settings import Characteristic
from quietmill.signals.event import Event, Herald

NAN = float("nan")
RAISED_AT = 1_772_439_270_000_000  # 2026-03-02T08:14:30Z
START = RAISED_AT - 213 * 30_000_000
ONSET_AT = RAISED_AT - 7 * 30_000_000  # 08:11:00


def press(**keys: Any) -> Characteristic:
    """The press of the contract's example."""
    entry = {
        "id": "press1.force",
        "topic": "tiles/press/1/force",
        "unit": "kN",
        "baseline": {"centre": 240.0, "sigma": 2.0},
        "specification": {"lower": 230.0, "upper": 250.0},
        "reaction": "Check the die temperature, then the powder moisture.",
        "labels": {"area": "pressing"},
    }
    return Characteristic.model_validate(entry | keys)


def bits(*pairs: str) -> int:
    """Rule bits of texts such as `cusum low`."""
    word = 0
    for pair in pairs:
        name, _, side = pair.partition(" ")
        rule = Rule[name.upper()]
        assert bool(side) != (rule in UNDIRECTED)
        word |= rule_bits(rule, LOW if side == "low" else HIGH)
    return word


def order(*rules: Rule) -> int:
    """The order of joining, four bits each, the first lowest."""
    return sum((rule + 1) << (4 * place) for place, rule in enumerate(rules))


def verdicts(started: int, point: Mapping[str, Any] = {}, **notice: Any) -> Verdicts:
    """One notice: by default `started` raise at point 214 of the contract's example."""
    points, notices = np.zeros(1, POINT), np.zeros(1, NOTICE)
    example = {"number": 214, "time": RAISED_AT, "value": 249.1, "centre": 240.0, "sigma": 2.0, "z": 4.55}
    example |= {"lower": 234.0, "upper": 246.0, "spread": NAN, "spread_lower": NAN, "spread_upper": NAN}
    for name, value in (example | dict(point)).items():
        points[0][name] = value
    told = {"kind": Notice.RAISED, "joined": started, "members": started, "start": START, "recent": 2}
    told |= {"order": order(*(rule for rule in Rule if started >> 2 * rule & 3))}
    told |= {"raised_number": 214, "raised_time": RAISED_AT, "onset_number": 207, "onset_time": ONSET_AT}
    for name, value in (told | {"shift": 6.2, "shift_sigma": 3.1} | notice).items():
        notices[0][name] = value
    recent = np.zeros((1, RECENT_POINTS), RECENT)
    number, time, value = points[0]["number"], points[0]["time"], points[0]["value"]
    recent[0][:2] = [(number - 1, time - 30_000_000, 240.3), (number, time, value)]
    return Verdicts(np.zeros(1, np.uint8), points, notices, recent, np.zeros(0, np.int64))


def event(
    *pairs: str,
    characteristic: Characteristic | None = None,
    point: Mapping[str, Any] = {},
    **notice: Any,
) -> Event:
    """The event of one notice whose rules are named by texts such as `cusum low`."""
    herald = Herald([characteristic or press()], "quietmill")
    return herald.events(verdicts(bits(*pairs), point, **notice))[0]


def returned(characteristic: Characteristic | None = None, ended: Ended = Ended.QUIET, **point: Any) -> Event:
    """The event of an episode of `beyond_limits` that is over eight points later."""
    shown = {"number": 222, "time": RAISED_AT + 240_000_000, "value": 240.3, "z": 0.15, **point}
    members = {"members": bits("beyond_limits high"), "order": order(Rule.BEYOND_LIMITS), "joined": 0}
    return event(characteristic=characteristic, point=shown, kind=Notice.RETURNED, ended=ended, **members)
