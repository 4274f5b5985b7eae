"""The web server: metrics and health, in a thread of its own that never touches what the loop writes."""

import socket
import threading
import time
from collections.abc import Callable
from typing import Final

import uvicorn
from starlette.applications import Starlette
from starlette.requests import Request
from starlette.responses import PlainTextResponse, Response
from starlette.routing import Route

from quietmill.outlets.metrics import CONTENT_TYPE, Copies, Writer

__all__ = ["Handover", "Health", "WebServer"]

COPY_SECONDS: Final = 5.0
"""How long a scrape waits for the loop."""
BEAT_SECONDS: Final = 10.0
"""A loop that has not turned for so long is stuck; idle, it turns at least once a second."""


class Health:
    """What the loop says of itself at each turn."""

    def __init__(self) -> None:
        self.beat = time.monotonic()
        self.troubles: tuple[str, ...] = ("the service is starting",)

    def turn(self, troubles: tuple[str, ...]) -> None:
        """Note that the loop turns, and why it may not be ready."""
        self.beat = time.monotonic()
        self.troubles = troubles


class Handover:
    """Hands copies of the arrays from the loop to whoever asks; none are made unasked."""

    def __init__(self, wake: Callable[[], None]) -> None:
        self._wake = wake
        self._asked = threading.Event()
        self._turnstile = threading.Lock()
        self._given = threading.Event()
        self._copies: Copies | None = None

    def ask(self, timeout_seconds: float) -> Copies | None:
        """Return fresh copies, or None when the loop gives none in time. For any thread but the loop's."""
        with self._turnstile:
            self._given.clear()
            self._copies = None
            self._asked.set()
            self._wake()
            self._given.wait(timeout_seconds)
            self._asked.clear()
            return self._copies

    def serve(self, make: Callable[[], Copies]) -> None:
        """Make copies if somebody waits for them. For the loop, between two batches."""
        if self._asked.is_set():
            self._asked.clear()
            self._copies = make()
            self._given.set()


class WebServer:
    """Serves `/metrics`, `/healthz` and `/readyz`. Raises `OSError` where the address cannot be had."""

    def __init__(self, host: str, port: int, writer: Writer, handover: Handover, health: Health) -> None:
        self._writer, self._handover, self._health = writer, handover, health
        family = socket.AF_INET6 if ":" in host else socket.AF_INET
        self._socket = socket.socket(family, socket.SOCK_STREAM)
        self._socket.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            self._socket.bind((host, port))
        except OSError:
            self._socket.close()
            raise
        routes = [Route("/metrics", self.metrics), Route("/healthz", self.healthz), Route("/readyz", self.readyz)]
        config = uvicorn.Config(
            Starlette(routes=routes), log_config=None, access_log=False, lifespan="off", timeout_graceful_shutdown=1
        )
        self._server = uvicorn.Server(config)
        self._thread = threading.Thread(target=self._server.run, args=([self._socket],), name="web", daemon=True)

    @property
    def address(self) -> tuple[str, int]:
        """Host and port that are served."""
        return self._socket.getsockname()[:2]

    def start(self) -> None:
        """Begin to serve."""
        self._thread.start()

    def stop(self) -> None:
        """End within some seconds."""
        self._server.should_exit = True
        self._thread.join(3)
        self._socket.close()

    def metrics(self, _request: Request) -> Response:
        """Return the exposition; 503 when the loop gives no copies."""
        copies = self._handover.ask(COPY_SECONDS)
        if copies is None:
            return PlainTextResponse(f"the loop has not answered for {COPY_SECONDS:g} s\n", 503)
        return Response(self._writer.write(copies), headers={"content-type": CONTENT_TYPE})

    def healthz(self, _request: Request) -> Response:
        """Return 200 while the loop turns."""
        age = time.monotonic() - self._health.beat
        if age > BEAT_SECONDS:
            return PlainTextResponse(f"the loop has not turned for {age:.0f} s\n", 503)
        return PlainTextResponse("the loop turns\n")

    def readyz(self, _request: Request) -> Response:
        """Return 200 when readings can come in, else 503 and why not."""
        troubles = self._health.troubles
        if troubles:
            return PlainTextResponse("".join(f"{trouble}\n" for trouble in troubles), 503)
        return PlainTextResponse("ready\n")
