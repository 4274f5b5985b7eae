"""Events: what an episode did at a point, as one CloudEvents document."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import isnan
from typing import Any, Final

import msgspec

from quietmill.instant import format_time
from quietmill.model import Direction, Ended, Notice, Rule, Verdicts, direction_of, rules_in
from quietmill.settings import Characteristic
from quietmill.signals.identity import event_id
from quietmill.signals.sentence import episode_returned, rule_joined, signal_raised

__all__ = ["TYPES", "Event", "Herald"]

TYPES: Final = {
    Notice.RAISED: "quietmill.signal.raised",
    Notice.JOINED: "quietmill.signal.joined",
    Notice.RETURNED: "quietmill.signal.returned",
}

encode = msgspec.json.Encoder().encode


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


def in_order(order: int) -> list[Rule]:
    """Return the rules of an episode in the order of joining (`NOTICE.order`)."""
    rules: list[Rule] = []
    while order:
        rules.append(Rule((order & 15) - 1))
        order >>= 4
    return rules


class Herald:
    """Writes the events of verdicts. Nothing in them comes from a wall clock, a host or a process.

    `characteristics` stand in the order of the bank's rows; `source` is the CloudEvents source.
    """

    def __init__(self, characteristics: Sequence[Characteristic], source: str) -> None:
        self._characteristics = characteristics
        self._source = source

    def events(self, verdicts: Verdicts) -> list[Event]:
        """Return the events of a batch, in the order in which they arose."""
        return [
            self._event(notice, verdicts.points[notice["point"]], shown)
            for notice, shown in zip(verdicts.notices, verdicts.recent, strict=True)
        ]

    def _event(self, notice: Any, point: Any, shown: Any) -> Event:
        kind, row = Notice(int(notice["kind"])), int(notice["row"])
        characteristic = self._characteristics[row]
        name, baseline = characteristic.id, characteristic.baseline.version
        start, number, time = int(notice["start"]), int(point["number"]), int(point["time"])
        identity = event_id(name, baseline, start, number, TYPES[kind])
        signal = event_id(name, baseline, start, int(notice["raised_number"]), TYPES[Notice.RAISED])
        started = tuple(rules_in(int(notice["joined"])))
        direction = direction_of(int(notice["members"]))
        summary = self._summary(kind, characteristic, notice, point, started, direction)
        data: dict[str, Any] = {
            "signal": signal,
            "characteristic": name,
            "unit": characteristic.unit,
            "labels": characteristic.labels,
            "summary": summary,
            "rules": [rule.label for rule in in_order(int(notice["order"]))],
            "direction": direction.label,
            "favourable": direction.label == characteristic.favourable and direction != Direction.NONE,
            "point": {
                "number": number,
                "time": format_time(time),
                "value": float(point["value"]),
                "z": float(point["z"]),
            },
            "centre": float(point["centre"]),
            "sigma": float(point["sigma"]),
            "limits": {"lower": or_null(float(point["lower"])), "upper": or_null(float(point["upper"]))},
            "spread": self._spread(point),
            "baseline": baseline,
            "specification": self._specification(characteristic, float(point["value"])),
            "onset": {
                "time": format_time(int(notice["onset_time"])),
                "point": int(notice["onset_number"]),
                "shift": or_null(float(notice["shift"])),
                "shift_sigma": or_null(float(notice["shift_sigma"])),
            },
            "recent": [
                {"number": number, "time": format_time(time), "value": value}
                for number, time, value in shown[: int(notice["recent"])].tolist()
            ],
            "reaction": characteristic.reaction,
        }
        if kind is Notice.RETURNED:
            data["ended"] = Ended(int(notice["ended"])).label
        document = encode(
            {
                "specversion": "1.0",
                "id": identity,
                "source": self._source,
                "type": TYPES[kind],
                "subject": name,
                "time": format_time(time),
                "datacontenttype": "application/json",
                "data": data,
            }
        )
        raised = int(notice["raised_time"])
        return Event(identity, kind, row, name, signal, time, raised, started, summary, document)

    @staticmethod
    def _spread(point: Any) -> dict[str, float | None] | None:
        """Return the spread statistic with its limits, or None where there is none (yet)."""
        value = float(point["spread"])
        if isnan(value):
            return None
        lower, upper = or_null(float(point["spread_lower"])), or_null(float(point["spread_upper"]))
        return {"value": value, "lower": lower, "upper": upper}

    @staticmethod
    def _specification(characteristic: Characteristic, value: float) -> dict[str, Any] | None:
        """Return what was promised and whether the reading keeps it, limits included."""
        specification = characteristic.specification
        if specification is None:
            return None
        lower, upper = specification.lower, specification.upper
        met = (lower is None or value >= lower) and (upper is None or value <= upper)
        return {"lower": lower, "upper": upper, "met": met}

    @staticmethod
    def _summary(
        kind: Notice,
        characteristic: Characteristic,
        notice: Any,
        point: Any,
        started: Sequence[Rule],
        direction: Direction,
    ) -> str:
        name, unit = characteristic.id, characteristic.unit
        value, sigma, time = float(point["value"]), float(point["sigma"]), int(point["time"])
        raised = int(notice["raised_time"])
        if kind is Notice.JOINED:
            joined = direction_of(int(notice["joined"]))
            return rule_joined(name, unit, started, joined, value, sigma, raised, time)
        if kind is Notice.RETURNED:
            quiet = characteristic.detector.quiet_points
            return episode_returned(name, Ended(int(notice["ended"])), quiet, raised, time)
        return signal_raised(
            name,
            unit,
            started,
            direction,
            direction.label == characteristic.favourable and direction != Direction.NONE,
            value,
            float(point["centre"]),
            sigma,
            float(point["lower"]),
            float(point["upper"]),
            float(notice["shift"]),
            int(notice["onset_time"]),
            time,
        )
