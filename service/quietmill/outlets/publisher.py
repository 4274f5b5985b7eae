"""What the service says on MQTT: kept in order until the broker has it."""

import json
from collections import OrderedDict
from collections.abc import Callable
from typing import Final, NamedTuple, Protocol

__all__ = ["EVENT_TYPE", "OUTBOX_LIMIT", "Link", "Publisher", "state_document"]

EVENT_TYPE: Final = "application/cloudevents+json"
"""The content type of event documents on MQTT 5."""
JSON_TYPE: Final = "application/json"
OUTBOX_LIMIT: Final = 10_000
"""With more events waiting, the loop acknowledges no more readings, so that the broker holds them back."""


class Link(Protocol):
    """What the publisher needs of the connection.

    What was handed over and not acknowledged when a connection ends, the link sends again on the next one, in order.
    """

    connected: bool
    window: int
    epoch: int
    on_acknowledged: Callable[[int], None]

    def publish(self, topic: str, payload: bytes, retain: bool, content_type: str | None) -> int:
        """Hand over a message with QoS 1; return a number by which it is acknowledged."""
        ...


class Letter(NamedTuple):
    """A message to publish."""

    topic: str
    payload: bytes
    retain: bool
    content_type: str | None
    number: int = 0
    """Its place in a durable outbox; 0 where there is none."""


class Publisher:
    """Publishes with QoS 1, in order, at most a window of messages ahead of the broker's acknowledgements.

    A retained message stands for how things are: it takes the place of an older one on its topic that still waits.
    So what waits is bounded by the number of characteristics, and by `OUTBOX_LIMIT` for events, past which `full`
    asks the loop to hold readings back.
    """

    def __init__(self, link: Link, prefix: str, client_id: str) -> None:
        self._link = link
        self._prefix = prefix
        self._waiting: OrderedDict[str | int, Letter] = OrderedDict()
        self._flying: dict[int, int] = {}
        self._events = 0
        self._number = 0
        self._greeted = 0
        self._state = "online"
        self.service_topic = f"{prefix}/service/{client_id}"
        self.on_delivered: Callable[[int], None] = lambda _number: None
        """Called with the number of each letter that need not be sent any more."""
        link.on_acknowledged = self._acknowledged

    def event_letter(self, characteristic: str, document: bytes) -> Letter:
        """Return what says that something happened."""
        return Letter(f"{self._prefix}/signals/{characteristic}", document, False, EVENT_TYPE)

    def status_letter(self, characteristic: str, document: bytes) -> Letter:
        """Return what says how things stand; the broker keeps the last word."""
        return Letter(f"{self._prefix}/status/{characteristic}", document, True, JSON_TYPE)

    def service(self, state: str) -> None:
        """Say that the service itself is `online` or `offline`."""
        self._state = state
        self.put(Letter(self.service_topic, state_document(state), True, JSON_TYPE))

    def put(self, letter: Letter) -> None:
        """Take a message to publish behind all that wait."""
        if letter.retain:
            older = self._waiting.pop(letter.topic, None)
            if older is not None:
                self._done(older.number)
            self._waiting[letter.topic] = letter
        else:
            self._number += 1
            self._events += 1
            self._waiting[self._number] = letter

    def turn(self) -> None:
        """Hand over what may go now; each new connection begins with the service's own state."""
        link = self._link
        if not link.connected:
            return
        if self._greeted != link.epoch and len(self._flying) < link.window:
            self._greeted = link.epoch
            self._hand_over(Letter(self.service_topic, state_document(self._state), True, JSON_TYPE))
        while self._waiting and len(self._flying) < link.window:
            _, letter = self._waiting.popitem(last=False)
            self._events -= not letter.retain
            self._hand_over(letter)

    def _hand_over(self, letter: Letter) -> None:
        topic, payload, retain, content_type, number = letter
        self._flying[self._link.publish(topic, payload, retain, content_type)] = number

    def _acknowledged(self, mid: int) -> None:
        self._done(self._flying.pop(mid, 0))

    def _done(self, number: int) -> None:
        if number:
            self.on_delivered(number)

    @property
    def outstanding(self) -> int:
        """How many messages the broker does not have yet."""
        return len(self._waiting) + len(self._flying)

    @property
    def full(self) -> bool:
        """Whether so many events wait that no more readings should be acknowledged."""
        return self._events > OUTBOX_LIMIT


def state_document(state: str) -> bytes:
    """Return the document of the service's own state.

    >>> state_document("offline")
    b'{"state":"offline"}'
    """
    return json.dumps({"state": state}, separators=(",", ":")).encode()
