import errno
import socket
import threading
import urllib.error
import urllib.request
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from functools import partial

import pytest
from prometheus_client.parser import text_string_to_metric_families

from broker import wait_for
from quietmill.charts.bank import Bank
from quietmill.outlets import web
from quietmill.outlets.metrics import CONTENT_TYPE, Copies, Tally, Writer
from quietmill.outlets.web import Exposition, Handover, Health, WebServer
from quietmill.settings import Characteristic

PRESS = Characteristic.model_validate(
    {"id": "press1.force", "topic": "tiles/press/1/force", "baseline": {"centre": 240.0, "sigma": 2.0}}
)


def copies() -> Copies:
    bank, tally = Bank([PRESS.detector]), Tally(1)
    return Copies(bank.rows, bank.state, tally.signals, tally.outcomes, tally.decision, tally.batch, 0, True, 0)


class Clock:
    """Seconds that pass when told to."""

    def __init__(self) -> None:
        self.now = 0.0

    def __call__(self) -> float:
        return self.now


class Loop:
    """The side of the loop: it turns when it is woken, and counts the copies it made."""

    def __init__(self) -> None:
        self.woken = threading.Event()
        self.handover = Handover(self.woken.set)
        self.clock = Clock()
        self.health = Health(self.clock)
        self.made = 0
        self.turning = True
        self.thread = threading.Thread(target=self.run)

    def run(self) -> None:
        while self.turning:
            self.woken.wait(10)
            self.woken.clear()
            self.handover.serve(self.make)

    def make(self) -> Exposition:
        self.made += 1
        return partial(Writer([PRESS]).write, copies())

    def stop(self) -> None:
        self.turning = False
        self.woken.set()
        if self.thread.is_alive():
            self.thread.join()


@pytest.fixture
def loop() -> Iterator[Loop]:
    loop = Loop()
    yield loop
    loop.stop()


def server_of(loop: Loop, port: int = 0) -> WebServer:
    return WebServer("127.0.0.1", port, loop.handover, loop.health)


@pytest.fixture
def server(loop: Loop) -> Iterator[WebServer]:
    server = server_of(loop)
    server.start()
    yield server
    server.stop()


def get(server: WebServer, path: str) -> tuple[int, str, str]:
    """Status, content type and text of a page."""
    host, port = server.address
    try:
        with urllib.request.urlopen(f"http://{host}:{port}{path}", timeout=30) as answer:
            return answer.status, answer.headers["content-type"], answer.read().decode()
    except urllib.error.HTTPError as error:
        with error:
            return error.code, error.headers["content-type"], error.read().decode()


def test_a_scrape_brings_the_exposition_with_its_content_type(loop: Loop, server: WebServer) -> None:
    loop.thread.start()
    status, content_type, text = get(server, "/metrics")
    assert (status, content_type) == (200, CONTENT_TYPE)
    assert "quietmill_point_value" in {family.name for family in text_string_to_metric_families(text)}


def test_copies_are_made_once_a_scrape_and_never_unasked(loop: Loop, server: WebServer) -> None:
    loop.thread.start()
    for _ in range(3):
        loop.woken.set()
        get(server, "/healthz")
    assert loop.made == 0
    for scrapes in (1, 2):
        get(server, "/metrics")
        assert loop.made == scrapes


def test_a_scrape_that_the_loop_does_not_answer_says_so(
    loop: Loop, server: WebServer, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(web, "COPY_SECONDS", 0.05)
    assert get(server, "/metrics") == (503, "text/plain; charset=utf-8", "the loop has not answered for 0.05 s\n")


def test_health_answers_while_all_scrapes_wait_for_a_stuck_loop(
    loop: Loop, server: WebServer, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Catches health checks that wait in line for the threads in which scrapes wait."""
    monkeypatch.setattr(web, "COPY_SECONDS", 60.0)
    loop.clock.now = 11.0
    with ThreadPoolExecutor(45) as scrapers:
        waiting = [scrapers.submit(get, server, "/metrics") for _ in range(45)]
        wait_for(lambda: loop.handover._request is not None, what="the first scrape to wait")
        assert get(server, "/healthz") == (503, "text/plain; charset=utf-8", "the loop has not turned for 11 s\n")
        assert not all(scrape.done() for scrape in waiting)
        loop.thread.start()
        assert {scrape.result()[0] for scrape in waiting} == {200}


@pytest.mark.parametrize(("age", "status"), [(0.0, 200), (9.9, 200), (10.1, 503)])
def test_a_loop_is_healthy_that_turned_not_long_ago(loop: Loop, server: WebServer, age: float, status: int) -> None:
    loop.clock.now = 1000.0
    loop.health.turn(())
    loop.clock.now += age
    assert get(server, "/healthz")[0] == get(server, "/readyz")[0] == status


def test_a_service_is_not_ready_before_its_first_turn(loop: Loop, server: WebServer) -> None:
    assert get(server, "/readyz")[::2] == (503, "the service is starting\n")
    loop.health.turn(())
    assert get(server, "/readyz")[::2] == (200, "ready\n")


def test_what_keeps_a_service_from_being_ready_is_named_a_line_a_reason(loop: Loop, server: WebServer) -> None:
    loop.health.turn(("no connection to the broker at 127.0.0.1:1883: connection refused", "the disk is full"))
    status, _, text = get(server, "/readyz")
    assert status == 503
    assert text.splitlines() == [*loop.health.troubles]
    assert get(server, "/healthz")[0] == 200


def test_a_page_that_is_not_there_is_not_found(server: WebServer) -> None:
    assert get(server, "/nothing")[0] == 404


def test_an_address_in_use_is_refused_at_once_to_who_asked_for_it(loop: Loop) -> None:
    first = server_of(loop)
    try:
        with pytest.raises(OSError, match="in use") as refused:
            server_of(loop, first.address[1])
        assert refused.value.errno == errno.EADDRINUSE
    finally:
        first.stop()


def test_the_port_is_free_again_after_a_stop_even_with_a_connection_left_open(loop: Loop, server: WebServer) -> None:
    address = server.address
    with socket.create_connection(address) as idle:
        idle.sendall(b"GET /healthz HTTP/1.1\r\nHost: x\r\n\r\n")
        assert idle.recv(100).startswith(b"HTTP/1.1 200")
        server.stop()
        assert not server._thread.is_alive()
    server_of(loop, address[1]).stop()


def test_a_stop_sends_away_a_scrape_that_waits(loop: Loop, server: WebServer) -> None:
    with ThreadPoolExecutor(1) as scraper:
        waiting = scraper.submit(get, server, "/metrics")
        wait_for(lambda: loop.handover._request is not None, what="the scrape to wait")
        server.stop()
        assert not server._thread.is_alive()
        assert waiting.result()[0] == 503


def test_nothing_of_the_server_is_printed(loop: Loop, server: WebServer, capfd: pytest.CaptureFixture[str]) -> None:
    get(server, "/healthz")
    server.stop()
    assert capfd.readouterr() == ("", "")


def test_all_that_ask_before_the_loop_turns_share_one_copy(loop: Loop) -> None:
    asked: list[Exposition | None] = []
    threads = [threading.Thread(target=lambda: asked.append(loop.handover.ask(30))) for _ in range(5)]
    for thread in threads:
        thread.start()
    wait_for(lambda: loop.handover._request is not None, what="somebody to ask")
    loop.thread.start()
    for thread in threads:
        thread.join()
    assert None not in asked
    assert 1 <= loop.made <= 5


def test_a_request_that_was_given_up_does_not_keep_the_next_one_waiting(loop: Loop) -> None:
    assert loop.handover.ask(0.001) is None
    loop.thread.start()
    assert loop.handover.ask(30) is not None


def test_who_asks_after_the_close_is_sent_away(loop: Loop) -> None:
    loop.handover.close()
    loop.thread.start()
    assert loop.handover.ask(30) is None
    assert loop.made == 0
