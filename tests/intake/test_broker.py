"""The connection, against a real Mosquitto."""

import contextlib
import random
import socket
import subprocess
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from structlog.testing import capture_logs

from broker import Mosquitto, Peer, free_port, running, wait_for
from quietmill.intake.broker import Connection, Will
from quietmill.intake.message import Message
from quietmill.settings import Broker

pytestmark = pytest.mark.broker

TOPICS = ("tiles/press/1", "tiles/press/2")
WILL = Will("quietmill/service/quietmill", b'{"state":"offline"}')
VERSIONS = pytest.mark.parametrize("version", ["5", "3.1.1"])


@contextlib.contextmanager
def connection(url: str, topics: tuple[str, ...] = TOPICS, **broker: object) -> Iterator[Connection]:
    link = Connection(Broker.model_validate({"url": url, **broker}), topics, WILL)
    try:
        yield link
    finally:
        link.close()


def drive(link: Connection, until: Callable[[], object], what: str = "the connection") -> list[Message]:
    """Turn the connection until something holds; return the messages that came."""
    taken: list[Message] = []

    def turn() -> object:
        taken.extend(link.take(0.02))
        return until()

    wait_for(turn, what=what)
    return taken


def ready(link: Connection) -> bool:
    return link.connected and not link.trouble


def take(link: Connection, count: int) -> list[Message]:
    taken: list[Message] = []
    wait_for(lambda: taken.extend(link.take(0.02)) or len(taken) >= count, what=f"{count} messages")
    return taken


@contextlib.contextmanager
def scripted(*answers: bytes) -> Iterator[str]:
    """Serve one client with fixed answers, one to each of its packets, then silence; yield the url."""
    done = threading.Event()
    server = socket.create_server(("127.0.0.1", 0))

    def serve() -> None:
        with contextlib.suppress(OSError), server.accept()[0] as peer:
            for answer in answers:
                peer.recv(65536)
                peer.sendall(answer)
            done.wait(60)

    thread = threading.Thread(target=serve, daemon=True)
    thread.start()
    try:
        yield f"mqtt://127.0.0.1:{server.getsockname()[1]}"
    finally:
        done.set()
        server.shutdown(socket.SHUT_RDWR)
        server.close()
        thread.join(10)


def reasons(logs: list[dict]) -> str:
    return " | ".join(str(entry.get("reason")) for entry in logs)


@VERSIONS
def test_messages_of_exact_topics_come_with_qos_1_in_order(tmp_path: Path, version: str) -> None:
    with running(tmp_path) as broker, connection(broker.url, version=version) as link, Peer(broker.port) as peer:
        drive(link, lambda: ready(link))
        peer.publish(*((TOPICS[place % 2], str(place)) for place in range(200)), ("tiles/press/10", "elsewhere"))
        taken: list[Message] = []
        while len(taken) < 200:
            taken += (batch := take(link, 1))
            link.acknowledge(batch)
        assert [message.payload for message in taken] == [str(place).encode() for place in range(200)]
        assert {(message.qos, message.dup, message.epoch) for message in taken} == {(1, False, 1)}


@VERSIONS
def test_what_was_not_acknowledged_comes_again_and_nothing_else(tmp_path: Path, version: str) -> None:
    with running(tmp_path, "max_inflight_messages 50") as broker, Peer(broker.port) as peer:
        with connection(broker.url, version=version) as link:
            drive(link, lambda: ready(link))
            peer.publish(*((TOPICS[0], str(place)) for place in range(30)))
            taken = take(link, 30)
            link.acknowledge(taken[:10])
            link.send()
            wait_for(lambda: not link.take(0.02), what="the acknowledgements to be sent")
        with connection(broker.url, version=version) as link:
            again = take(link, 20)
        assert [message.payload for message in again] == [str(place).encode() for place in range(10, 30)]
        assert all(message.dup for message in again)


def test_nothing_of_an_older_connection_is_acknowledged(tmp_path: Path) -> None:
    broker = Mosquitto(tmp_path).start()
    try:
        with connection(broker.url) as link:
            drive(link, lambda: ready(link))
            with Peer(broker.port) as peer:
                peer.publish((TOPICS[0], "before"))
            old = take(link, 1)
            broker.stop()
            drive(link, lambda: not link.connected)
            broker.start()
            again = drive(link, lambda: ready(link))
            link.acknowledge(old)
            link.send()
            again += take(link, 1) if not again else []
            assert [message.payload for message in again] == [b"before"]
            assert again[0].epoch == old[0].epoch + 1
        with connection(broker.url) as link:
            assert [message.payload for message in take(link, 1)] == [b"before"]
    finally:
        broker.stop()


class Tap:
    """A proxy that notes the packet ids of acknowledgements on their way to the broker."""

    def __init__(self, port: int) -> None:
        self.acknowledged: list[int] = []
        self.listener = socket.create_server(("127.0.0.1", 0))
        self.port = self.listener.getsockname()[1]
        self.target = port
        self.thread = threading.Thread(target=self.serve, daemon=True)
        self.thread.start()

    def serve(self) -> None:
        with self.listener.accept()[0] as near, socket.create_connection(("127.0.0.1", self.target)) as far:
            back = threading.Thread(target=self.pump, args=(far, near), daemon=True)
            back.start()
            self.pump(near, far, note=True)
            back.join(10)

    def close(self) -> None:
        self.thread.join(10)
        self.listener.close()

    def pump(self, source: socket.socket, sink: socket.socket, note: bool = False) -> None:
        held = b""
        with contextlib.suppress(OSError):
            while data := source.recv(65536):
                sink.sendall(data)
                held = self.parse(held + data) if note else b""
        with contextlib.suppress(OSError):
            sink.shutdown(socket.SHUT_WR)

    def parse(self, data: bytes) -> bytes:
        """Note whole packets; return what is left. Lengths here are below 16,384."""
        while len(data) >= 3:
            length, used = (data[1], 2) if data[1] < 128 else ((data[1] & 127) + 128 * data[2], 3)
            if len(data) < used + length:
                break
            if data[0] >> 4 == 4:
                self.acknowledged.append(int.from_bytes(data[used : used + 2], "big"))
            data = data[used + length :]
        return data


def test_acknowledgements_are_sent_in_the_order_of_arrival(tmp_path: Path) -> None:
    with running(tmp_path, "max_inflight_messages 100") as broker:
        tap = Tap(broker.port)
        with connection(f"mqtt://127.0.0.1:{tap.port}") as link, Peer(broker.port) as peer:
            drive(link, lambda: ready(link))
            peer.publish(*((TOPICS[0], str(place)) for place in range(100)))
            arrived = take(link, 100)
            link.acknowledge(arrived)
            link.send()
            wait_for(lambda: len(tap.acknowledged) >= 100, what="the acknowledgements")
        tap.close()
        assert tap.acknowledged == [message.mid for message in arrived]


def test_a_retained_message_comes_once_for_a_session(tmp_path: Path) -> None:
    with running(tmp_path) as broker:
        with Peer(broker.port) as peer:
            peer.publish((TOPICS[0], "old"), retain=True)
        with connection(broker.url) as link:
            first = take(link, 1)
            assert first[0].retain
            link.acknowledge(first)
            link.send()
        with connection(broker.url) as link:
            drive(link, lambda: ready(link))
            assert link.take(0.2) == []


def test_qos_0_is_counted(tmp_path: Path) -> None:
    with running(tmp_path) as broker, connection(broker.url) as link, Peer(broker.port) as peer:
        drive(link, lambda: ready(link))
        peer.publish((TOPICS[0], "1"), qos=0)
        take(link, 1)
        assert link.messages_qos0 == 1


def test_many_topics_are_subscribed_to_in_several_packets(tmp_path: Path) -> None:
    topics = tuple(f"tiles/press/{number}" for number in range(2500))
    with running(tmp_path) as broker, connection(broker.url, topics) as link, Peer(broker.port) as peer:
        drive(link, lambda: ready(link))
        peer.publish((topics[0], "first"), (topics[-1], "last"))
        assert {message.payload for message in take(link, 2)} == {b"first", b"last"}


def test_connecting_never_holds_the_loop(monkeypatch: pytest.MonkeyPatch) -> None:
    """A name service or broker that never answers costs a thread, not a turn."""
    release, threads = threading.Event(), []

    def never(*_args: object, **_more: object) -> None:
        threads.append(threading.current_thread().name)
        release.wait(60)
        raise OSError("released")

    monkeypatch.setattr(socket, "create_connection", never)
    with connection("mqtt://192.0.2.1:1883") as link:
        drive(link, lambda: threads, "an attempt")
        for _ in range(50):
            assert link.take(0.0) == []
        assert threads == ["connect"]
        release.set()


def test_an_absent_broker_is_named_once_and_tried_again() -> None:
    port = free_port()
    with capture_logs() as logs, connection(f"mqtt://127.0.0.1:{port}") as link:
        drive(link, lambda: link._attempt >= 3, "three attempts")
    assert reasons(logs).count("connection refused") == 1
    assert f"127.0.0.1:{port}" in reasons(logs)


def test_an_unknown_name_is_said_so() -> None:
    with capture_logs() as logs, connection("mqtt://no-such-host.invalid") as link:
        drive(link, lambda: logs, "the log line")
    assert "the name no-such-host.invalid is not known" in reasons(logs)


def test_a_peer_that_is_no_broker_is_said_so(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("quietmill.intake.broker.ANSWER_SECONDS", 0.5)
    with scripted(b"HTTP/1.1 400 Bad Request\r\n\r\n") as url, capture_logs() as logs, connection(url) as link:
        drive(link, lambda: logs, "the log line")
        assert "no connection to the broker" in link.trouble


def test_a_broker_that_accepts_and_never_answers_is_given_up(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("quietmill.intake.broker.ANSWER_SECONDS", 0.3)
    with scripted() as url, capture_logs() as logs, connection(url) as link:
        drive(link, lambda: logs, "the log line")
    assert "did not answer in 0.3 s" in reasons(logs)


@VERSIONS
def test_a_bad_password_is_said_so(tmp_path: Path, version: str) -> None:
    passwords, secret = tmp_path / "passwords", tmp_path / "secret"
    subprocess.run(["mosquitto_passwd", "-b", "-c", str(passwords), "press", "right"], check=True, capture_output=True)
    secret.write_text("wrong\n")
    with running(tmp_path / "b", f"password_file {passwords}") as broker:
        account = {"user": "press", "password_file": secret, "version": version}
        with capture_logs() as logs, connection(broker.url, **account) as link:
            drive(link, lambda: logs, "the log line")
            assert "broker.password_file" in link.trouble
            secret.write_text("right\n")
            drive(link, lambda: ready(link), "the right password to be read")
    assert "broker.password_file" in reasons(logs)


def test_a_client_id_used_twice_is_said_so(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("quietmill.intake.broker.FIRST_DELAY_SECONDS", 0.05)
    monkeypatch.setattr(random, "uniform", lambda low, _high: low / 20)
    with (
        running(tmp_path) as broker,
        capture_logs() as logs,
        connection(broker.url) as one,
        connection(broker.url) as other,
    ):
        drive(one, lambda: other.take(0.0) or "'quietmill'" in reasons(logs), "the two to fight")
    assert "give each service a broker.client_id of its own" in reasons(logs)


def test_a_refused_subscription_is_said_so_and_keeps_the_service_unready() -> None:
    connack, suback = b"\x20\x03\x00\x00\x00", b"\x90\x05\x00\x01\x00\x01\x87"
    with scripted(connack, suback) as url, capture_logs() as logs, connection(url) as link:
        drive(link, lambda: "refused" in link.trouble, "the refusal")
        assert TOPICS[1] in link.trouble
    assert [entry["topic"] for entry in logs if entry["event"] == "the broker refused a subscription"] == [TOPICS[1]]


def test_the_loop_can_be_woken(tmp_path: Path) -> None:
    with running(tmp_path) as broker, connection(broker.url) as link:
        drive(link, lambda: ready(link))
        threading.Timer(0.2, link.wake).start()
        begin = time.monotonic()
        link.take(60)
        assert time.monotonic() - begin < 30
