"""What the journal and snapshots hold, packed: each with a checksum over all of it."""

from typing import Final, NamedTuple, TypeVar
from zlib import compress, crc32, decompress

import msgspec

__all__ = ["READINGS", "SETTINGS", "Entry", "ReadingsEntry", "Snapshot", "checksum", "pack", "unpack"]


READINGS: Final = 1
SETTINGS: Final = 2
"""Kinds of journal entries; others may join."""


class ReadingsEntry(msgspec.Struct, frozen=True, array_like=True):
    """A batch: its readings in the order of arrival, and what it leaves for the next.

    `forget` says that the broker knew no session when the batch began, `seen` holds the fingerprints of the last
    messages under their packet ids, `messages` the number of the next message.
    """

    readings: bytes
    forget: bool
    seen: dict[int, int]
    messages: int


class Snapshot(msgspec.Struct, frozen=True):
    """The arrays after a journal entry, and all that is needed to go on from there."""

    characteristics: list[str]
    """The resolved settings of each row, as JSON."""
    state: bytes
    pool: bytes
    seen: dict[int, int]
    messages: int


class Entry(NamedTuple):
    """A journal entry as it stands in the record."""

    number: int
    kind: int
    body: bytes


T = TypeVar("T", bound=msgspec.Struct)

encoder: Final = msgspec.msgpack.Encoder()


def checksum(number: int, body: bytes) -> int:
    """Return what must stand beside a body."""
    return crc32(body, number & 0xFFFFFFFF)


def pack(content: msgspec.Struct) -> bytes:
    """Return the body of an entry or snapshot."""
    return compress(encoder.encode(content), 1)


def unpack(body: bytes, kind: type[T]) -> T:
    """Return what a body holds."""
    return msgspec.msgpack.decode(decompress(body), type=kind)
