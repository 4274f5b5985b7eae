"""Attempts to connect: one at a time, each in a short-lived thread, further and further apart.

Connecting (name service, TCP, TLS, websocket) is the only thing that can block, so the loop never does it itself.
"""

import contextlib
import random
import threading
from collections.abc import Callable
from queue import Empty, SimpleQueue
from typing import Final

from quietmill.intake.wire import RawSocket

__all__ = [
    "ANSWER_SECONDS",
    "FIRST_DELAY_SECONDS",
    "LONGEST_DELAY_SECONDS",
    "SHORT_LIVES",
    "STEADY_SECONDS",
    "Attempts",
]

ANSWER_SECONDS: Final = 10.0
"""How long to wait for a connection, and for the broker's answer on it."""
GIVE_UP_SECONDS: Final = 2 * ANSWER_SECONDS
"""A name with several addresses, or TLS after TCP, takes longer than one answer."""
FIRST_DELAY_SECONDS: Final = 1.0
LONGEST_DELAY_SECONDS: Final = 60.0
STEADY_SECONDS: Final = 20.0
"""A connection that lasted so long was a good one."""
SHORT_LIVES: Final = 3
"""So many connections in a row that were accepted and lost before that look like a client id in use twice."""


class Attempts:
    """When to connect, and what came of it.

    `make` connects, in a thread; `wake` tells the loop that it is done. After a failure the next attempt waits
    one second, then two, up to a minute, less a random part, so that many services do not come back at once.
    A connection that the broker accepted sets the wait back, unless several in a row were lost at once.
    """

    def __init__(self, make: Callable[[], RawSocket], wake: Callable[[], None]) -> None:
        self._make = make
        self._wake = wake
        self._made: SimpleQueue[tuple[int, RawSocket | BaseException]] = SimpleQueue()
        self._number = 0
        self._running = False
        self._deadline = 0.0
        self._next = 0.0
        self._delay = FIRST_DELAY_SECONDS
        self._short_lives = 0
        self._closed = False
        self.failures = 0
        """How many attempts have failed since the last one that succeeded."""

    @property
    def contested(self) -> bool:
        """Whether connections are lost soon after each was accepted."""
        return self._short_lives >= SHORT_LIVES

    def turn(self, now: float) -> RawSocket | BaseException | None:
        """Begin an attempt when one is due; return the socket of one that is done, or what it failed with.

        Not to be called while a connection stands. `now` is seconds of a monotonic clock.
        """
        if not self._running:
            if now >= self._next:
                self._number += 1
                self._running = True
                self._deadline = now + GIVE_UP_SECONDS
                threading.Thread(target=self._run, args=(self._number,), name="connect", daemon=True).start()
            return None
        with contextlib.suppress(Empty):
            while True:
                number, made = self._made.get_nowait()
                if number == self._number:
                    self._running = False
                    return made
                discard(made)
        if now < self._deadline:
            return None
        self._running = False
        self._number += 1  # whatever it makes after all comes too late
        return TimeoutError()

    def _run(self, number: int) -> None:
        try:
            made: RawSocket | BaseException = self._make()
        except Exception as error:  # noqa: BLE001  whatever it is, the loop must learn of it
            made = error
        self._made.put((number, made))
        if self._closed:
            self._discard_all()
        self._wake()

    def ended(self, now: float, lived_seconds: float | None = None, contested: bool = False) -> None:
        """Note that an attempt failed, or that a connection is gone which the broker had accepted for so long.

        `contested` where the broker said that another client took it.
        """
        self._running = False
        if lived_seconds is None:
            self.failures += 1
        else:
            self.failures = 0
            self._short_lives = self._short_lives + 1 if lived_seconds < STEADY_SECONDS else 0
            if not (contested or self.contested):
                self._delay = FIRST_DELAY_SECONDS
        self._next = now + self._delay * random.uniform(0.5, 1.0)  # noqa: S311  jitter is no secret
        self._delay = min(2 * self._delay, LONGEST_DELAY_SECONDS)

    def close(self) -> None:
        """Let go of what an attempt made, or will make yet."""
        self._closed = True
        self._discard_all()

    def _discard_all(self) -> None:
        with contextlib.suppress(Empty):
            while True:
                discard(self._made.get_nowait()[1])


def discard(made: RawSocket | BaseException) -> None:
    """Close a socket that nobody wants any more."""
    if not isinstance(made, BaseException):
        made.close()
