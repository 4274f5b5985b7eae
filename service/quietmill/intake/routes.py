"""From topics to characteristics: decode messages into readings, and say what became of those that gave none."""

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final, NamedTuple

import numpy as np

from quietmill.intake.message import Message, fingerprint
from quietmill.intake.payloads import Reader, Refusal, reader_of
from quietmill.intake.screen import FUTURE_MICROSECONDS, screen
from quietmill.model import NO_TIME, OUT_OF_RANGE_SIGMAS, READING, Outcome, Records
from quietmill.settings import Characteristic

__all__ = ["MAX_PAYLOAD_BYTES", "Decoded", "Note", "Routes"]

MAX_PAYLOAD_BYTES: Final = 256 * 1024
"""A longer payload is refused unread."""

SCREENED: Final[Mapping[Outcome, str]] = MappingProxyType(
    {
        Outcome.NOT_A_NUMBER: "a value that is finite after scaling",
        Outcome.OUT_OF_RANGE: f"a value within {OUT_OF_RANGE_SIGMAS:g} sigma of the centre",
        Outcome.FUTURE: f"a time at most {FUTURE_MICROSECONDS // 60_000_000} minutes after its arrival",
    }
)

_SHOWN: Final = 80
"""Characters of a payload that the log shows."""


class Note(NamedTuple):
    """One refused reading as an example for the log; its texts are printable and bounded."""

    outcome: Outcome
    topic: str
    text: str


@dataclass(frozen=True, slots=True)
class Decoded:
    """What a batch of messages gave.

    `readings` stand in the order of arrival. `refused` counts what gave none, by outcome, and `notes` has at most one
    example of each. `messages` is the number of the first message of the next batch.
    """

    readings: Records
    refused: Mapping[Outcome, int]
    notes: Sequence[Note]
    messages: int


class _Tag(NamedTuple):
    """One characteristic that waits for a topic's messages."""

    row: int
    reader: Reader
    skips_retained: bool


_Route = Sequence[tuple[type[Reader], Sequence[_Tag]]]


class Routes:
    """Knows which characteristics each topic feeds and how their readings are read from its payloads.

    Rows are positions in `characteristics`. Nothing is remembered from message to message: how a stream is cut into
    batches makes no difference.
    """

    def __init__(self, characteristics: Sequence[Characteristic]) -> None:
        self._ids = [characteristic.id for characteristic in characteristics]
        self._centre = np.array([characteristic.detector.centre for characteristic in characteristics], np.float64)
        self._sigma = np.array([characteristic.detector.sigma for characteristic in characteristics], np.float64)
        payloads = [characteristic.payload for characteristic in characteristics]
        self._scale = np.array([1.0 if payload is None else payload.scale for payload in payloads], np.float64)
        self._offset = np.array([0.0 if payload is None else payload.offset for payload in payloads], np.float64)
        routes: dict[str, dict[type[Reader], list[_Tag]]] = {}
        for row, characteristic in enumerate(characteristics):
            reader = reader_of(characteristic.payload)
            tags = routes.setdefault(characteristic.topic, {}).setdefault(type(reader), [])
            tags.append(_Tag(row, reader, characteristic.retained == "skip"))
        self._routes: dict[str, _Route] = {topic: tuple(formats.items()) for topic, formats in routes.items()}

    @property
    def topics(self) -> tuple[str, ...]:
        """The topics to subscribe to: each once, and exact, so that none overlaps another."""
        return tuple(self._routes)

    def decode(self, messages: Sequence[Message], first_message: int) -> Decoded:
        """Return the readings of messages in the order of arrival, and count the refusals.

        `first_message` numbers the first of them. A reading without a time of its own gets that of its arrival. Never
        raises, whatever the payloads are.
        """
        batch = _Batch(self._ids)
        for number, message in enumerate(messages, first_message):
            self._read(message, number, batch)
        readings = self._table(batch)
        outcomes = screen(readings, self._centre[readings["row"]], self._sigma[readings["row"]])
        if outcomes.any():
            for index in outcomes.nonzero()[0].tolist():
                outcome = Outcome(outcomes[index])
                refusal = Refusal(outcome, SCREENED[outcome])
                batch.refuse(refusal, messages[batch.numbers[index] - first_message], batch.rows[index])
            readings = readings[outcomes == Outcome.ACCEPTED]
        return Decoded(readings, batch.refused, tuple(batch.notes.values()), first_message + len(messages))

    def _read(self, message: Message, number: int, batch: "_Batch") -> None:
        """Read one message for every characteristic that waits for its topic."""
        topic, payload, _, retain, _, _, arrival, _ = message
        route = self._routes.get(topic)
        if route is None:
            batch.refuse(_UNROUTED, message)
            return
        if retain and any(tag.skips_retained for _, tags in route for tag in tags):
            batch.refuse(_RETAINED, message)
            route = [(kind, [tag for tag in tags if not tag.skips_retained]) for kind, tags in route]
            route = [(kind, tags) for kind, tags in route if tags]
            if not route:
                return
        if len(payload) > MAX_PAYLOAD_BYTES:
            batch.refuse(_TOO_LARGE, message)
            return
        first, told, unreadable = len(batch.rows), 0, False
        for kind, tags in route:
            document = kind.parse(payload)
            if isinstance(document, Refusal):
                if not unreadable:
                    batch.refuse(document, message)
                unreadable = True
                continue
            for row, reader, _ in tags:
                for sample in reader.read(document, payload):
                    told += 1
                    if isinstance(sample, Refusal):
                        batch.refuse(sample, message, row)
                    else:
                        batch.samples.append(sample)
                        batch.rows.append(row)
                        batch.numbers.append(number)
                        batch.arrivals.append(arrival)
        if told > 1:
            batch.several.append((first, len(batch.rows), message))

    def _table(self, batch: "_Batch") -> Records:
        """Return the samples of a batch as readings, scaled."""
        readings = np.zeros(len(batch.rows), READING)
        if not batch.rows:
            return readings
        values, times, sequences = zip(*batch.samples, strict=True)
        readings["row"] = row = np.array(batch.rows, np.int64)
        readings["message"] = batch.numbers
        readings["arrival"] = arrival = np.array(batch.arrivals, np.int64)
        time = np.array(times, np.int64)
        readings["time"] = np.where(time == NO_TIME, arrival, time)
        readings["sequence"] = sequences
        with np.errstate(over="ignore", invalid="ignore"):
            # Adding even an offset of 0 makes -0.0 the 0.0 that it equals, for the fingerprint's sake.
            value = np.array(values, np.float64) * self._scale[row] + self._offset[row]
        readings["value"] = value
        readings["fingerprint"] = value.view(np.uint64)
        for first, last, message in batch.several:
            readings["fingerprint"][first:last] = fingerprint(message)
        return readings


class _Batch:
    """What is gathered while the messages of one batch are read; the columns grow in step."""

    def __init__(self, ids: Sequence[str]) -> None:
        self.ids = ids
        self.rows: list[int] = []
        self.numbers: list[int] = []
        self.arrivals: list[int] = []
        self.samples: list[tuple[float, int, int]] = []
        self.several: list[tuple[int, int, Message]] = []
        self.refused: Counter[Outcome] = Counter()
        self.notes: dict[Outcome, Note] = {}

    def refuse(self, refusal: Refusal, message: Message, row: int | None = None) -> None:
        """Count one refusal, and keep it as an example if it is the batch's first of its outcome."""
        self.refused[refusal.outcome] += 1
        if refusal.outcome not in self.notes:
            who = "" if row is None else f"{self.ids[row]}: "
            # A character is at most four bytes, so this much of the payload is enough.
            payload = _printable(message.payload[: 4 * _SHOWN].decode(errors="replace"))
            text = f"{who}expected {refusal.expected}, got a payload of {len(message.payload)} bytes: {payload}"
            self.notes[refusal.outcome] = Note(refusal.outcome, _printable(message.topic), text)


_UNROUTED: Final = Refusal(Outcome.UNROUTED, "a topic that the settings name")
_RETAINED: Final = Refusal(Outcome.RETAINED, "a live message, not a retained one (retained: accept takes both)")
_TOO_LARGE: Final = Refusal(Outcome.TOO_LARGE, f"at most {MAX_PAYLOAD_BYTES} bytes")


def _printable(text: str) -> str:
    return "".join(character if character.isprintable() else "\N{REPLACEMENT CHARACTER}" for character in text[:_SHOWN])
