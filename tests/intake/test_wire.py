import errno
import socket
from collections.abc import Iterator

import pytest

from broker import wait_for
from quietmill.intake.wire import BufferedSocket


@pytest.fixture
def pair() -> Iterator[tuple[BufferedSocket, socket.socket]]:
    near, far = socket.socketpair()
    near.setblocking(False)
    with near, far:
        yield BufferedSocket(near), far


Pair = tuple[BufferedSocket, socket.socket]


def test_a_read_that_finds_nothing_is_dry(pair: Pair) -> None:
    near, far = pair
    far.sendall(b"abc")
    assert (near.recv(2), near.recv(9), near.dry) == (b"ab", b"c", False)
    with pytest.raises(BlockingIOError):
        near.recv(1)
    assert near.dry


def test_what_the_peer_does_not_take_yet_is_kept_in_order(pair: Pair) -> None:
    near, far = pair
    data = bytes(range(256)) * 20_000
    assert near.send(data) == len(data)
    near.flush()
    assert near.unsent
    received = bytearray()
    while len(received) < len(data):
        received += far.recv(1 << 20)
        near.flush()
    assert received == data
    assert not near.unsent


def test_the_peers_last_words_are_read_although_writing_failed(pair: Pair) -> None:
    """Catches a lost farewell: why the broker ended the connection is in there."""
    near, far = pair
    far.sendall(b"why")
    far.close()

    def write() -> OSError | None:
        near.send(b"x")
        near.flush()
        return near.failure

    assert isinstance(wait_for(write), BrokenPipeError)
    assert near.recv(9) == b"why"
    assert near.recv(9) == b""


def test_closing_sends_what_is_left(pair: Pair) -> None:
    near, far = pair
    near.send(b"farewell")
    near.close()
    assert (far.recv(99), far.recv(99)) == (b"farewell", b"")


class Unreachable(socket.socket):
    """A socket whose way to the peer is gone, which reading does not notice."""

    def send(self, *_args: object) -> int:
        raise OSError(errno.EHOSTUNREACH, "No route to host")

    def recv(self, *_args: object) -> bytes:
        raise BlockingIOError


def test_a_write_that_fails_shows_at_the_next_read() -> None:
    with Unreachable() as raw:
        near = BufferedSocket(raw)
        near.send(b"x")
        near.flush()
        with pytest.raises(OSError, match="No route to host"):
            near.recv(1)
