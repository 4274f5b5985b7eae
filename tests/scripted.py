"""A broker that says what a test wants it to, for answers that a real one does not give."""

import contextlib
import socket
import threading
from collections.abc import Callable, Iterator

from packets import Conversation


class Scripted:
    """Listens on a port; each connection is a conversation that `script` holds, in a thread of its own."""

    def __init__(self, script: Callable[[Conversation], None], port: int = 0) -> None:
        self._script = script
        self._listener = socket.create_server(("127.0.0.1", port))
        self._open: list[socket.socket] = []
        self.port = self._listener.getsockname()[1]
        self.connections = 0
        self._threads = [threading.Thread(target=self._listen)]
        self._threads[0].start()

    def _listen(self) -> None:
        with contextlib.suppress(OSError):
            while True:
                sock, _ = self._listener.accept()
                self.connections += 1
                self._open.append(sock)
                self._threads.append(threading.Thread(target=self._serve, args=(sock,)))
                self._threads[-1].start()

    def _serve(self, sock: socket.socket) -> None:
        with sock, contextlib.suppress(OSError):
            self._script(Conversation(sock))

    def close(self) -> None:
        self._listener.shutdown(socket.SHUT_RDWR)
        self._threads[0].join()
        self._listener.close()
        for sock in self._open:
            with contextlib.suppress(OSError):
                sock.shutdown(socket.SHUT_RDWR)
        for thread in self._threads:
            thread.join()

    @property
    def url(self) -> str:
        return f"mqtt://127.0.0.1:{self.port}"


@contextlib.contextmanager
def scripted(script: Callable[[Conversation], None], port: int = 0) -> Iterator[Scripted]:
    peer = Scripted(script, port)
    try:
        yield peer
    finally:
        peer.close()
