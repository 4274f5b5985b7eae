"""The socket that paho reads and writes: buffered both ways, and aware of when it ran dry.

paho reads a packet with three calls and writes each acknowledgement with one. Buffered, a batch costs a few system
calls; and the loop learns when there is nothing left to read, which is when it thinks.
"""

import ssl
from typing import Final, Protocol

__all__ = ["BufferedSocket", "RawSocket"]

READ_BYTES: Final = 256 * 1024


class RawSocket(Protocol):
    """What a connected TCP, TLS or websocket offers."""

    def recv(self, size: int, /) -> bytes:
        """Return what has come, b"" at the end."""
        ...

    def send(self, data: bytes, /) -> int:
        """Return how much was taken."""
        ...

    def close(self) -> None:
        """End the connection."""
        ...

    def fileno(self) -> int:
        """Return the file descriptor."""
        ...

    def setblocking(self, flag: bool, /) -> None:
        """Say whether the others may wait."""
        ...


class BufferedSocket:
    """A connected socket with buffers; `dry` after a read that found nothing."""

    def __init__(self, raw: RawSocket) -> None:
        self.raw = raw
        self.dry = False
        self.failure: OSError | None = None
        """What the connection broke with, if it did."""
        self._read = b""
        self._place = 0
        self._written = bytearray()

    def recv(self, size: int) -> bytes:
        """Return up to `size` bytes; b"" at the end. Raises `BlockingIOError` when dry, `OSError` when lost."""
        if self._place == len(self._read):
            try:
                self._read = self.raw.recv(READ_BYTES)
            except (BlockingIOError, ssl.SSLWantReadError, ssl.SSLWantWriteError):
                if self.failure is not None:  # of writing; what the broker had still to say is read by now
                    raise self.failure from None
                self.dry = True
                raise BlockingIOError from None
            except OSError as error:
                self.failure = error
                raise
            self._place = 0
            self.dry = False
        begin = self._place
        self._place = min(begin + size, len(self._read))
        return self._read[begin : self._place]

    def send(self, data: bytes) -> int:
        """Take all of `data`; it goes out with the next `flush`."""
        self._written += data
        return len(data)

    def flush(self) -> None:
        """Send what the peer will take. A lost connection shows at the next read."""
        try:
            while self._written:
                sent = self.raw.send(bytes(self._written[:READ_BYTES]))
                del self._written[:sent]
        except (BlockingIOError, ssl.SSLWantReadError, ssl.SSLWantWriteError):
            return
        except OSError as error:
            self.failure = self.failure or error
            self._written.clear()

    @property
    def unsent(self) -> bool:
        """Whether something waits to be sent."""
        return bool(self._written)

    def close(self) -> None:
        """Send what the peer will still take, such as a farewell, and close the connection."""
        self.flush()
        self.raw.close()

    def fileno(self) -> int:
        """Return the file descriptor, for a selector."""
        return self.raw.fileno()

    def setblocking(self, flag: bool) -> None:
        """Pass on; the loop never blocks."""
        self.raw.setblocking(flag)

    def settimeout(self, timeout: float | None) -> None:
        """Accepted for paho's sake: the loop never blocks."""
