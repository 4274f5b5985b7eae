"""The judging half of the service: from readings to what is said, to a snapshot and back, and to other settings.

Nothing here waits for a socket or reads a clock, so that recovery and the live loop do the very same.
"""

from collections.abc import Sequence
from typing import Any, Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

from quietmill.charts.bank import Bank
from quietmill.charts.layout import STATE
from quietmill.model import NOTICE, POINT, RECENT, RECENT_POINTS, Ended, Notice, Records, Verdicts
from quietmill.record.entries import Snapshot
from quietmill.settings import Characteristic
from quietmill.signals.event import Event, Herald
from quietmill.signals.status import status_document

__all__ = ["Judging", "Said"]

IN_PLACE: Final = ("topic", "unit", "labels", "reaction", "favourable", "specification", "quiet_points")
"""What may change in a characteristic without its detector starting afresh."""


class Said(NamedTuple):
    """What a batch says: its verdicts, the events, and the rows whose status has changed."""

    verdicts: Verdicts
    events: list[Event]
    changed: list[int]


class Judging:
    """The bank of some characteristics with the herald that speaks for it."""

    def __init__(self, characteristics: Sequence[Characteristic], source: str) -> None:
        self.characteristics = tuple(characteristics)
        self.source = source
        self.bank = Bank([characteristic.detector for characteristic in characteristics])
        self.herald = Herald(self.characteristics, source)

    def judge(self, readings: NDArray[Any]) -> Said:
        """Judge a batch, and say what it has to say."""
        verdicts = self.bank.judge(readings)
        events = self.herald.events(verdicts)
        return Said(verdicts, events, [event.row for event in events if event.notice is not Notice.JOINED])

    def status(self, row: int) -> bytes:
        """Return how a characteristic stands."""
        state = self.bank.state[row]
        if not state["open"]:
            return status_document("in_control", int(state["returned_time"]), None)
        signal = self.herald.signal_id(row, int(state["start"]), int(state["raised_number"]))
        return status_document("signal", int(state["raised_time"]), signal)

    def snapshot(self, seen: dict[int, int], messages: int) -> Snapshot:
        """Return the arrays as they are, with what recovery needs beside them."""
        return Snapshot(
            characteristics=[written(characteristic) for characteristic in self.characteristics],
            state=self.bank.state.tobytes(),
            pool=self.bank.pool.tobytes(),
            seen=dict(seen),
            messages=messages,
        )

    @classmethod
    def recovered(cls, snapshot: Snapshot, source: str) -> "Judging":
        """Return the judging half as a snapshot holds it, under the settings that it was judged with."""
        judging = cls([Characteristic.model_validate_json(text) for text in snapshot.characteristics], source)
        bank = judging.bank
        bank.state[:] = np.frombuffer(snapshot.state, STATE)
        bank.pool[:] = np.frombuffer(snapshot.pool, bank.pool.dtype)
        return judging

    def under(self, characteristics: Sequence[Characteristic]) -> tuple["Judging", list[Event]]:
        """Return the judging half under other settings, and the events of episodes that end by it.

        A characteristic whose judging settings did not change keeps its state bit for bit; another starts afresh, its
        number going on. Open signals of those that start afresh or are gone return.
        """
        after = Judging(characteristics, self.source)
        places = {characteristic.id: row for row, characteristic in enumerate(self.characteristics)}
        ended: list[tuple[int, Ended]] = []
        for row, characteristic in enumerate(after.characteristics):
            old = places.pop(characteristic.id, None)
            if old is None:
                continue
            if judged_alike(self.characteristics[old], characteristic):
                self._carry(old, after.bank, row)
                continue
            number = self.bank.state["number"][old]
            after.bank.state["number"][row] = number
            after.bank.state["first"][row] = number + 1
            for name in ("accepted", "last_time", "last_message", "last_sequence", "last_fingerprint"):
                after.bank.state[name][row] = self.bank.state[name][old]
            ended.append((old, Ended.RELOAD))
        ended += [(row, Ended.REMOVED) for row in places.values()]
        events = [event for row, why in ended if self.bank.state["open"][row] for event in self._end(row, why)]
        return after, events

    def _carry(self, row: int, bank: Bank, into: int) -> None:
        bank.state[into] = self.bank.state[row]
        ours, theirs = self.bank.rows[row], bank.rows[into]
        kept = int(ours["kept"])
        begin, there = int(ours["pool"]), int(theirs["pool"])
        bank.pool[there : there + kept] = self.bank.pool[begin : begin + kept]

    def _end(self, row: int, why: Ended) -> list[Event]:
        """Return the event by which an open episode ends at its last point."""
        state, settings = self.bank.state[row], self.bank.rows[row]
        point, notice = np.zeros(1, POINT), np.zeros(1, NOTICE)
        for name in ("number", "value", "z"):
            point[name] = state[name]
        point["row"], point["time"] = row, state["point_time"]
        point["centre"], point["sigma"] = settings["centre"], settings["sigma"]
        point["lower"] = settings["centre"] - settings["width"] * settings["sigma"]
        point["upper"] = settings["centre"] + settings["width"] * settings["sigma"]
        for name in ("spread", "spread_lower", "spread_upper", "ewma", "cusum_high", "cusum_low"):
            point[name] = np.nan
        for name in ("members", "order", "start", "raised_number", "raised_time", "onset_number", "onset_time"):
            notice[name] = state[name]
        notice["kind"], notice["ended"], notice["row"] = Notice.RETURNED, why, row
        notice["shift"], notice["shift_sigma"] = state["shift"], state["shift_sigma"]
        shown = self._recent(row)
        notice["recent"] = len(shown)
        recent = np.zeros((1, RECENT_POINTS), RECENT)
        recent[0, : len(shown)] = shown
        return self.herald.events(Verdicts(np.zeros(0, np.uint8), point, notice, recent, np.zeros(0, np.int64)))

    def _recent(self, row: int) -> Records:
        """Return the last points that a row has kept, as an event shows them."""
        state, settings = self.bank.state[row], self.bank.rows[row]
        kept, number = int(settings["kept"]), int(state["number"])
        count = min(RECENT_POINTS, kept, number - int(state["first"]) + 1)
        numbers = np.arange(number - count + 1, number + 1)
        points = self.bank.pool[int(settings["pool"]) + numbers % kept]
        shown = np.zeros(count, RECENT)
        shown["number"], shown["time"], shown["value"] = numbers, points["time"], points["value"]
        return shown


def written(characteristic: Characteristic) -> str:
    """Return the resolved settings of a characteristic as JSON, in the form of the settings file."""
    return characteristic.model_dump_json(by_alias=True, exclude_none=True)


def judged_alike(one: Characteristic, other: Characteristic) -> bool:
    """Return whether a row may keep its state from one settings file to the next."""
    exclude: set[str] = set(IN_PLACE)
    return one.model_dump(exclude=exclude) == other.model_dump(exclude=exclude)
