"""Events: what an episode did at a point, as one CloudEvents document."""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from math import isnan
from typing import Any, Final

import msgspec

from quietmill.instant import format_time
from quietmill.model import Direction, Ended, Notice, Records, Rule, Verdicts, direction_of, rules_in
from quietmill.settings import Characteristic
from quietmill.signals.identity import event_id
from quietmill.signals.sentence import Shown, episode_returned, rule_joined, signal_raised

__all__ = ["TYPES", "Event", "Herald"]

TYPES: Final = {
    Notice.RAISED: "quietmill.signal.raised",
    Notice.JOINED: "quietmill.signal.joined",
    Notice.RETURNED: "quietmill.signal.returned",
}

encode = msgspec.json.Encoder().encode

written = lru_cache(maxsize=16_384)(format_time)
"""A time as text: the events of one episode show many of the same points."""


@dataclass(frozen=True, slots=True)
class Event:
    """One event, ready to be published: its document is one line of UTF-8 JSON.

    `signal` is the id of the episode's raised event; `started` the rules that began to hold; `time` and `raised_time`
    are microseconds UTC.
    """

    id: str
    notice: Notice
    row: int
    characteristic: str
    signal: str
    time: int
    raised_time: int
    started: tuple[Rule, ...]
    summary: str
    document: bytes


def or_null(value: float) -> float | None:
    """Return None for NaN, which JSON does not know."""
    return None if isnan(value) else value


def in_order(order: int) -> list[str]:
    """Return the rules of an episode in the order of joining (`NOTICE.order`)."""
    rules: list[str] = []
    while order:
        rules.append(Rule((order & 15) - 1).label)
        order >>= 4
    return rules


def records(array: Records) -> list[dict[str, Any]]:
    """Return the records of an array as plain numbers by name: reading them one by one from numpy is slow."""
    fields = array.dtype.names or ()
    return [dict(zip(fields, values, strict=True)) for values in array.tolist()]


class Herald:
    """Writes the events of verdicts. Nothing in them comes from a wall clock, a host or a process.

    `characteristics` stand in the order of the bank's rows; `source` is the CloudEvents source.
    """

    def __init__(self, characteristics: Sequence[Characteristic], source: str) -> None:
        self._characteristics = characteristics
        self._source = source

    def events(self, verdicts: Verdicts) -> list[Event]:
        """Return the events of a batch, in the order in which they arose."""
        if not len(verdicts.notices):
            return []
        notices, points = records(verdicts.notices), records(verdicts.points[verdicts.notices["point"]])
        return [
            self._event(notice, point, recent[: notice["recent"]].tolist())
            for notice, point, recent in zip(notices, points, verdicts.recent, strict=True)
        ]

    def signal_id(self, row: int, start: int, raised_number: int) -> str:
        """Return the id of an episode: that of the event that raised it."""
        characteristic = self._characteristics[row]
        return event_id(characteristic.id, characteristic.baseline.version, start, raised_number, TYPES[Notice.RAISED])

    def _event(self, notice: dict[str, Any], point: dict[str, Any], recent: list[tuple[int, int, float]]) -> Event:
        kind, row = Notice(notice["kind"]), notice["row"]
        characteristic = self._characteristics[row]
        name, baseline = characteristic.id, characteristic.baseline.version
        start, raised_number = notice["start"], notice["raised_number"]
        signal = self.signal_id(row, start, raised_number)
        identity = signal
        if kind is not Notice.RAISED:
            identity = event_id(name, baseline, start, point["number"], TYPES[kind])
        direction = direction_of(notice["members"])
        favourable = direction is not Direction.NONE and direction.label == characteristic.favourable
        time = format_time(point["time"])
        summary = summary_of(kind, characteristic, favourable, notice, point)
        data: dict[str, Any] = {
            "signal": signal,
            "characteristic": name,
            "unit": characteristic.unit,
            "labels": characteristic.labels,
            "summary": summary,
            "rules": in_order(notice["order"]),
            "direction": direction.label,
            "favourable": favourable,
            "point": {"number": point["number"], "time": time, "value": point["value"], "z": point["z"]},
            "centre": point["centre"],
            "sigma": point["sigma"],
            "limits": {"lower": or_null(point["lower"]), "upper": or_null(point["upper"])},
            "spread": spread_of(point),
            "baseline": baseline,
            "specification": specification_of(characteristic, point["value"]),
            "onset": {
                "time": format_time(notice["onset_time"]),
                "point": notice["onset_number"],
                "shift": or_null(notice["shift"]),
                "shift_sigma": or_null(notice["shift_sigma"]),
            },
            "recent": [{"number": number, "time": written(time), "value": value} for number, time, value in recent],
            "reaction": characteristic.reaction,
        }
        if kind is Notice.RETURNED:
            data["ended"] = Ended(notice["ended"]).label
        document = encode(
            {
                "specversion": "1.0",
                "id": identity,
                "source": self._source,
                "type": TYPES[kind],
                "subject": name,
                "time": time,
                "datacontenttype": "application/json",
                "data": data,
            }
        )
        started = tuple(rules_in(notice["joined"]))
        raised_time = notice["raised_time"]
        return Event(identity, kind, row, name, signal, point["time"], raised_time, started, summary, document)


def spread_of(point: dict[str, Any]) -> dict[str, float | None] | None:
    """Return the spread statistic with its limits, or None where there is none (yet)."""
    if isnan(point["spread"]):
        return None
    lower, upper = or_null(point["spread_lower"]), or_null(point["spread_upper"])
    return {"value": point["spread"], "lower": lower, "upper": upper}


def specification_of(characteristic: Characteristic, value: float) -> dict[str, Any] | None:
    """Return what was promised and whether the reading keeps it, limits included."""
    specification = characteristic.specification
    if specification is None:
        return None
    lower, upper = specification.lower, specification.upper
    met = (lower is None or value >= lower) and (upper is None or value <= upper)
    return {"lower": lower, "upper": upper, "met": met}


def summary_of(
    kind: Notice, characteristic: Characteristic, favourable: bool, notice: dict[str, Any], point: dict[str, Any]
) -> str:
    """Return the sentence of an event."""
    name, shown = characteristic.id, Shown(characteristic.unit, *(point[field] for field in Shown._fields[1:]))
    match kind:
        case Notice.RAISED:
            return signal_raised(name, notice["joined"], favourable, notice["shift"], notice["onset_time"], shown)
        case Notice.JOINED:
            return rule_joined(name, notice["joined"], notice["raised_time"], shown)
        case Notice.RETURNED:
            quiet_points = characteristic.detector.quiet_points
            return episode_returned(name, Ended(notice["ended"]), quiet_points, notice["raised_time"], shown)
