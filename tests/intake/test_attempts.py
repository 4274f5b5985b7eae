"""When to connect: never two at once, further and further apart, and never with a socket left over."""

import random
import socket
import threading
from collections.abc import Callable

import pytest

from broker import wait_for
from quietmill.intake.attempts import (
    FIRST_DELAY_SECONDS,
    GIVE_UP_SECONDS,
    LONGEST_DELAY_SECONDS,
    SHORT_LIVES,
    STEADY_SECONDS,
    Attempts,
)


@pytest.fixture(autouse=True)
def no_jitter(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(random, "uniform", lambda _low, high: high)


def wait(attempts: Attempts) -> float:
    return attempts._next


def done(attempts: Attempts, now: float) -> object:
    return wait_for(lambda: attempts.turn(now), what="the attempt")


def refuse() -> socket.socket:
    raise ConnectionRefusedError


def idle(make: Callable[[], socket.socket] = refuse) -> Attempts:
    return Attempts(make, lambda: None)


def test_failures_wait_twice_as_long_each_up_to_a_minute() -> None:
    attempts, waits = idle(), []
    for _ in range(8):
        attempts.ended(0.0)
        waits.append(wait(attempts))
    assert waits == [1, 2, 4, 8, 16, 32, 60, 60]
    assert (FIRST_DELAY_SECONDS, LONGEST_DELAY_SECONDS) == (1, 60)


def test_an_accepted_connection_sets_the_wait_back() -> None:
    attempts = idle()
    for _ in range(5):
        attempts.ended(0.0)
    attempts.ended(0.0, lived_seconds=1.0)
    assert wait(attempts) == FIRST_DELAY_SECONDS


def test_connections_lost_at_once_again_and_again_wait_longer_until_one_is_steady() -> None:
    attempts, waits = idle(), []
    for _ in range(SHORT_LIVES + 3):
        attempts.ended(0.0, lived_seconds=0.5)
        waits.append(wait(attempts))
    assert waits == [1, 1, 2, 4, 8, 16]
    assert attempts.contested
    attempts.ended(0.0, lived_seconds=STEADY_SECONDS)
    assert (attempts.contested, wait(attempts)) == (False, FIRST_DELAY_SECONDS)


def test_a_session_that_was_taken_over_waits_longer_at_once() -> None:
    attempts = idle()
    waits = []
    for _ in range(3):
        attempts.ended(0.0, lived_seconds=0.5, contested=True)
        waits.append(wait(attempts))
    assert waits == [1, 2, 4]


def test_the_wait_is_shortened_by_chance(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(random, "uniform", lambda low, _high: low)
    attempts = idle()
    attempts.ended(100.0)
    assert wait(attempts) == 100.5


def test_what_an_attempt_raises_comes_back_to_the_loop() -> None:
    attempts = idle()
    assert attempts.turn(0.0) is None
    assert isinstance(done(attempts, 0.0), ConnectionRefusedError)
    attempts.ended(0.0)
    assert attempts.turn(0.9) is None
    assert not attempts._running


def test_an_attempt_that_takes_too_long_is_given_up_and_its_socket_closed() -> None:
    release, made = threading.Event(), []

    def slow() -> socket.socket:
        if not made:
            made.append(socket.socket())
            release.wait(60)
            return made[0]
        raise ConnectionRefusedError

    attempts = idle(slow)
    attempts.turn(0.0)
    wait_for(lambda: made, what="the attempt to begin")
    assert attempts.turn(GIVE_UP_SECONDS - 0.1) is None
    assert isinstance(attempts.turn(GIVE_UP_SECONDS), TimeoutError)
    attempts.ended(GIVE_UP_SECONDS)
    release.set()
    wait_for(lambda: not attempts._made.empty(), what="the late socket")
    assert isinstance(done(attempts, 1000.0), ConnectionRefusedError)
    assert made[0].fileno() == -1
