"""The demo's own client on the broker: it sends the plant's readings and hears what the service says."""

import json
from collections.abc import Sequence
from queue import Empty, SimpleQueue
from typing import Any, Final, NamedTuple

from paho.mqtt import client as mqtt
from paho.mqtt.enums import CallbackAPIVersion

from quietmill.demo.broker import DemoError
from quietmill.settings import Settings

__all__ = ["Heard", "Watcher"]

MOST_OUTSTANDING: Final = 2000
"""So many messages may wait for the broker before the plant has to."""
LAST_WORD: Final = "tileworks/demo/last"
"""What the demo says to itself: when it comes back, all that was said before it has come."""


class Heard(NamedTuple):
    """One document from the broker."""

    topic: str
    document: dict[str, Any]


class Watcher:
    """Sends readings with QoS 1 and keeps in order what the service publishes. Raises `DemoError`."""

    def __init__(self, settings: Settings) -> None:
        self._heard: SimpleQueue[tuple[str, bytes]] = SimpleQueue()
        self._sent = self._confirmed = 0
        self._leaving = False
        self._lost: str | None = None
        self._service = f"{settings.publish.prefix}/service/{settings.broker.client_id}"
        self._client = client = mqtt.Client(
            CallbackAPIVersion.VERSION2, client_id="tileworks-plant", protocol=mqtt.MQTTv5
        )
        client.on_message = lambda _client, _data, message: self._heard.put((message.topic, bytes(message.payload)))
        client.on_publish = self._on_publish
        client.on_disconnect = self._on_disconnect
        try:
            client.connect(settings.broker.host, settings.broker.port)
        except OSError as error:
            raise DemoError(f"the broker does not answer: {error}") from None
        topics = (f"{settings.publish.prefix}/signals/+", self._service, LAST_WORD)
        client.subscribe([(topic, 1) for topic in topics])
        client.loop_start()

    def _on_publish(self, *_: Any) -> None:
        self._confirmed += 1

    def _on_disconnect(self, _client: mqtt.Client, _data: Any, _flags: Any, reason: Any, _properties: Any) -> None:
        if not self._leaving:
            self._lost = str(reason)

    @property
    def full(self) -> bool:
        """Whether the broker is behind and the plant should wait."""
        return self._sent - self._confirmed > MOST_OUTSTANDING

    def look_after(self) -> None:
        """Raise `DemoError` when the broker has gone."""
        if self._lost is not None:
            raise DemoError(f"the broker has gone ({self._lost}): the demo cannot go on")

    def publish(self, messages: Sequence[tuple[str, bytes]]) -> None:
        """Send readings with QoS 1."""
        for topic, payload in messages:
            self._client.publish(topic, payload, qos=1)
        self._sent += len(messages)

    def say_last(self) -> None:
        """Send the last word, after all else."""
        self.publish([(LAST_WORD, b"{}")])

    def hear(self, seconds: float) -> Heard | None:
        """Return the next document, waiting at most so long."""
        try:
            topic, payload = self._heard.get(timeout=max(seconds, 0.001))
        except Empty:
            return None
        return Heard(topic, json.loads(payload))

    def is_online(self, heard: Heard) -> bool:
        """Return whether the service says that it is there."""
        return heard.topic == self._service and heard.document.get("state") == "online"

    @staticmethod
    def is_last(heard: Heard) -> bool:
        """Return whether this is the last word."""
        return heard.topic == LAST_WORD

    def close(self) -> None:
        """Leave the broker."""
        self._leaving = True
        self._client.disconnect()
        self._client.loop_stop()
