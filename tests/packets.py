"""MQTT packets on the wire, for peers that a test scripts and for one that listens in."""

import socket
import struct
from typing import NamedTuple

CONNECT, CONNACK, PUBLISH, PUBACK, SUBSCRIBE, SUBACK, UNSUBSCRIBE, DISCONNECT = 1, 2, 3, 4, 8, 9, 10, 14


class Packet(NamedTuple):
    """One packet: its type, the flags beside it, and what follows its length."""

    kind: int
    flags: int
    body: bytes

    @property
    def number(self) -> int:
        """The packet identifier of a PUBACK, SUBSCRIBE, UNSUBSCRIBE or PUBLISH of QoS 1."""
        begin = 2 + struct.unpack_from("!H", self.body)[0] if self.kind == PUBLISH else 0
        return struct.unpack_from("!H", self.body, begin)[0]


def split(data: bytes) -> tuple[list[Packet], bytes]:
    """Return the packets that are complete, and the rest."""
    found, begin = [], 0
    while True:
        length, shift, place = 0, 0, begin + 1
        while place < len(data):
            length |= (data[place] & 127) << shift
            shift += 7
            place += 1
            if data[place - 1] < 128:
                break
        else:
            return found, data[begin:]
        if place + length > len(data):
            return found, data[begin:]
        found.append(Packet(data[begin] >> 4, data[begin] & 15, data[place : place + length]))
        begin = place + length


def packet(kind: int, body: bytes, flags: int = 0) -> bytes:
    """Return a packet of fewer than 128 bytes."""
    assert len(body) < 128
    return bytes([kind << 4 | flags, len(body)]) + body


class Conversation:
    """The broker's end of one connection, played by a test."""

    def __init__(self, sock: socket.socket) -> None:
        self.sock = sock
        self._rest = b""
        self._waiting: list[Packet] = []

    def hear(self) -> Packet:
        """Return the next packet. Raises `ConnectionError` at the end."""
        while not self._waiting:
            data = self.sock.recv(65536)
            if not data:
                raise ConnectionAbortedError
            self._waiting, self._rest = split(self._rest + data)
        return self._waiting.pop(0)

    def say(self, *data: bytes) -> None:
        self.sock.sendall(b"".join(data))

    def accept(self, version: str, properties: bytes = b"") -> None:
        """Hear CONNECT and grant it."""
        assert self.hear().kind == CONNECT
        tail = bytes([len(properties)]) + properties if version == "5" else b""
        self.say(packet(CONNACK, b"\0\0" + tail))
