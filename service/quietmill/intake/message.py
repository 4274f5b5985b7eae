"""One MQTT message as it came from the broker, before anything is made of it."""

from typing import NamedTuple

__all__ = ["Message"]


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
