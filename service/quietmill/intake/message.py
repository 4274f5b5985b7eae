"""One MQTT message as it came from the broker, before anything is made of it."""

from hashlib import blake2b
from typing import NamedTuple

__all__ = ["Message", "fingerprint"]


class Message(NamedTuple):
    """What the broker delivered, and when and over which connection it came.

    `arrival` is microseconds UTC, read once when the message is taken from the socket; `epoch` counts the
    connections of this process, so that a message is never acknowledged over a later one than its own.
    """

    topic: str
    payload: bytes
    qos: int
    retain: bool
    dup: bool
    mid: int
    arrival: int
    epoch: int


def fingerprint(message: Message) -> int:
    """Return a hash of topic and payload that is the same in every process."""
    content = message.topic.encode(errors="surrogatepass") + b"\0" + message.payload
    return int.from_bytes(blake2b(content, digest_size=8).digest(), "big")
