"""What the service says on MQTT: kept in order until the broker has it."""

import json
from collections import deque
from collections.abc import Callable
from typing import Final, NamedTuple, Protocol

__all__ = ["EVENT_TYPE", "OUTBOX_LIMIT", "Link", "Publisher"]

EVENT_TYPE: Final = "application/cloudevents+json"
"""The content type of event documents on MQTT 5."""

OUTBOX_LIMIT: Final = 10_000
"""With more waiting, the loop acknowledges no more readings, so that the broker holds them back."""


class Link(Protocol):
    """What the publisher needs of the connection."""

    connected: bool
    window: int
    epoch: int
    on_acknowledged: Callable[[int], None]

    def publish(self, topic: str, payload: bytes, retain: bool, content_type: str | None) -> int:
        """Hand over a message with QoS 1; return a number by which it is acknowledged."""
        ...


class Letter(NamedTuple):
    """A message that waits to be published."""

    topic: str
    payload: bytes
    retain: bool
    content_type: str | None


class Publisher:
    """Publishes with QoS 1, in order, at most a window of messages ahead of the broker's acknowledgements.

    What was handed over and not acknowledged when a connection ends is sent again, in order, on the next one.
    """

    def __init__(self, link: Link, prefix: str, client_id: str) -> None:
        self._link = link
        self._prefix = prefix
        self._waiting: deque[Letter] = deque()
        self._flying: set[int] = set()
        self._greeted = 0
        self.service_topic = f"{prefix}/service/{client_id}"
        link.on_acknowledged = self._flying.discard

    def event(self, characteristic: str, document: bytes) -> None:
        """Say that something happened."""
        self._waiting.append(Letter(f"{self._prefix}/signals/{characteristic}", document, False, EVENT_TYPE))

    def status(self, characteristic: str, document: bytes) -> None:
        """Say how things stand; the broker keeps the last word."""
        self._waiting.append(Letter(f"{self._prefix}/status/{characteristic}", document, True, "application/json"))

    def service(self, state: str) -> None:
        """Say that the service itself is `online` or `offline`."""
        self._waiting.append(Letter(self.service_topic, state_document(state), True, "application/json"))

    def turn(self) -> None:
        """Hand over what may go now; greet each new connection."""
        link = self._link
        if not link.connected:
            return
        if self._greeted != link.epoch:
            self._greeted = link.epoch
            self._waiting.appendleft(Letter(self.service_topic, state_document("online"), True, "application/json"))
        while self._waiting and len(self._flying) < link.window:
            self._flying.add(link.publish(*self._waiting.popleft()))

    @property
    def outstanding(self) -> int:
        """How many messages the broker does not have yet."""
        return len(self._waiting) + len(self._flying)

    @property
    def full(self) -> bool:
        """Whether so much waits that no more readings should be acknowledged."""
        return len(self._waiting) > OUTBOX_LIMIT


def state_document(state: str) -> bytes:
    """Return the document of the service's own state.

    >>> state_document("offline")
    b'{"state":"offline"}'
    """
    return json.dumps({"state": state}, separators=(",", ":")).encode()
