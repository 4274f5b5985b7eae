"""The web server: metrics and health, in a thread of its own that never touches what the loop writes."""

import socket
import threading
import time
from collections.abc import Callable
from concurrent.futures import Future
from typing import Final

import uvicorn
from starlette.applications import Starlette
from starlette.requests import Request
from starlette.responses import PlainTextResponse, Response
from starlette.routing import Route

from quietmill.outlets.metrics import CONTENT_TYPE

__all__ = ["Exposition", "Handover", "Health", "WebServer"]

COPY_SECONDS: Final = 5.0
"""How long a scrape waits for the loop."""
BEAT_SECONDS: Final = 10.0
"""A loop that has not turned for so long is stuck; idle, it turns at least once a second."""
GRACE_SECONDS: Final = 1
"""How long a stop waits for answers under way."""
MOST_CONNECTIONS: Final = 100
"""More at a time are sent away: each may hold an exposition of many megabytes."""
BACKLOG: Final = 128
"""So many connections wait to be taken."""


class Health:
    """What the loop says of itself at each turn; `clock` gives seconds that never fall."""

    def __init__(self, clock: Callable[[], float] = time.monotonic) -> None:
        self._clock = clock
        self._beat = clock()
        self.troubles: tuple[str, ...] = ("the service is starting",)

    def turn(self, troubles: tuple[str, ...]) -> None:
        """Note that the loop turns, and why it may not be ready."""
        self._beat = self._clock()
        self.troubles = troubles

    @property
    def stuck(self) -> str | None:
        """What there is to say of a loop that does not turn."""
        age_seconds = self._clock() - self._beat
        return f"the loop has not turned for {age_seconds:.0f} s" if age_seconds > BEAT_SECONDS else None


Exposition = Callable[[], bytes]
"""Writes what a scrape shows, from copies made beforehand, in the thread of whoever calls it."""


class Handover:
    """Hands an exposition of the arrays as they are from the loop to whoever asks; none is made unasked.

    `wake` rouses the loop where it waits for readings.
    """

    def __init__(self, wake: Callable[[], None]) -> None:
        self._wake = wake
        self._lock = threading.Lock()
        self._request: Future[Exposition | None] | None = None
        self._closed = False

    def ask(self, timeout_seconds: float) -> Exposition | None:
        """Return a fresh exposition, or None when the loop gives none in time. For any thread but the loop's."""
        with self._lock:
            if self._closed:
                return None
            if self._request is None:
                self._request = Future()
            # One request stands for all that ask meanwhile: a stuck loop gathers no queue.
            request = self._request
        self._wake()
        try:
            return request.result(timeout_seconds)
        except TimeoutError:
            return None

    def serve(self, make: Callable[[], Exposition]) -> None:
        """Make an exposition if somebody waits for it. For the loop, between two batches."""
        if self._request is None:
            return
        with self._lock:
            request, self._request = self._request, None
        if request is not None:
            request.set_result(make())

    def close(self) -> None:
        """Send away who waits and who will ask: the loop serves no more."""
        with self._lock:
            request, self._request, self._closed = self._request, None, True
        if request is not None:
            request.set_result(None)


class WebServer:
    """Serves `/metrics`, `/healthz` and `/readyz`.

    The address is taken, and connections wait, as soon as it is built; raises `OSError` where it cannot be had.
    """

    def __init__(self, host: str, port: int, handover: Handover, health: Health) -> None:
        self._handover, self._health = handover, health
        family = socket.AF_INET6 if ":" in host else socket.AF_INET
        self._socket = socket.socket(family, socket.SOCK_STREAM)
        self._socket.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            self._socket.bind((host, port))
            # Two sockets may be bound to one address, but only one may listen there.
            self._socket.listen(BACKLOG)
        except OSError:
            self._socket.close()
            raise
        routes = [Route("/metrics", self.metrics), Route("/healthz", self.healthz), Route("/readyz", self.readyz)]
        config = uvicorn.Config(
            Starlette(routes=routes),
            log_config=None,
            access_log=False,
            server_header=False,
            lifespan="off",
            ws="none",
            limit_concurrency=MOST_CONNECTIONS,
            timeout_graceful_shutdown=GRACE_SECONDS,
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
        """End, whether started or not; answers under way have a second."""
        self._handover.close()
        self._server.should_exit = True
        if self._thread.is_alive():
            self._thread.join(GRACE_SECONDS + 2)
        self._socket.close()

    def metrics(self, _request: Request) -> Response:
        """Return the exposition; 503 when the loop gives none."""
        exposition = self._handover.ask(COPY_SECONDS)
        if exposition is None:
            return unavailable(f"the loop has not answered for {COPY_SECONDS:g} s")
        return Response(exposition(), headers={"content-type": CONTENT_TYPE})

    # Health answers without a worker thread: they may all be waiting for a stuck loop.

    async def healthz(self, _request: Request) -> Response:
        """Return 200 while the loop turns."""
        stuck = self._health.stuck
        return unavailable(stuck) if stuck else PlainTextResponse("the loop turns\n")

    async def readyz(self, _request: Request) -> Response:
        """Return 200 when readings can come in, else 503 and why not."""
        stuck = self._health.stuck
        troubles = (stuck, *self._health.troubles) if stuck else self._health.troubles
        return unavailable(*troubles) if troubles else PlainTextResponse("ready\n")


def unavailable(*reasons: str) -> Response:
    """Return an answer that says why there is none, a line a reason."""
    return PlainTextResponse("".join(f"{reason}\n" for reason in reasons), 503)
