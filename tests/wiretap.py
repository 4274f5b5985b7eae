"""A wire between service and broker that a test listens in to, and cuts."""

import contextlib
import socket
import threading
from collections.abc import Iterator

from packets import Packet, split


class Wiretap:
    """Passes everything on; `said` holds, per connection, the packets that went to the broker, in order."""

    def __init__(self, port: int) -> None:
        self._broker = port
        self._listener = socket.create_server(("127.0.0.1", 0))
        self._pairs: list[tuple[socket.socket, socket.socket]] = []
        self._threads = [threading.Thread(target=self._listen)]
        self.port = self._listener.getsockname()[1]
        self.said: list[list[Packet]] = []
        self._threads[0].start()

    def _listen(self) -> None:
        with contextlib.suppress(OSError):
            while True:
                near, _ = self._listener.accept()
                try:
                    far = socket.create_connection(("127.0.0.1", self._broker))
                except OSError:
                    near.close()
                    continue
                self._pairs.append((near, far))
                self.said.append([])
                for source, sink, heard in ((near, far, self.said[-1]), (far, near, None)):
                    self._threads.append(threading.Thread(target=self._pass_on, args=(source, sink, heard)))
                    self._threads[-1].start()

    @staticmethod
    def _pass_on(source: socket.socket, sink: socket.socket, heard: list[Packet] | None) -> None:
        rest = b""
        with contextlib.suppress(OSError):
            while data := source.recv(65536):
                if heard is not None:
                    packets, rest = split(rest + data)
                    heard.extend(packets)
                sink.sendall(data)
        for sock in (source, sink):
            with contextlib.suppress(OSError):
                sock.shutdown(socket.SHUT_RDWR)

    def cut(self) -> None:
        """End all connections without a word to either side."""
        for pair in self._pairs:
            for sock in pair:
                with contextlib.suppress(OSError):
                    sock.shutdown(socket.SHUT_RDWR)

    def numbers(self, kind: int, connection: int = -1) -> list[int]:
        """Return the packet identifiers of the packets of a kind that went to the broker."""
        return [packet.number for packet in self.said[connection] if packet.kind == kind]

    def close(self) -> None:
        self._listener.shutdown(socket.SHUT_RDWR)
        self._threads[0].join()
        self.cut()
        for thread in self._threads:
            thread.join()
        self._listener.close()
        for sock in (sock for pair in self._pairs for sock in pair):
            sock.close()

    @property
    def url(self) -> str:
        return f"mqtt://127.0.0.1:{self.port}"


@contextlib.contextmanager
def tapped(port: int) -> Iterator[Wiretap]:
    wire = Wiretap(port)
    try:
        yield wire
    finally:
        wire.close()
