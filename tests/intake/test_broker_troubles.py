"""Everything that keeps the service from its broker: said once, in plain words, with what to do, and outlived."""

import random
import socket
import threading
from pathlib import Path

import pytest
from structlog.testing import capture_logs

from broker import Peer, free_port, password_file, running
from intake.link import TOPICS, connection, drive, payloads, ready, reasons, take
from packets import CONNACK, DISCONNECT, PUBACK, PUBLISH, SUBACK, SUBSCRIBE, Conversation, packet
from quietmill.intake import broker as module
from quietmill.intake.trouble import CredentialsError
from scripted import scripted

pytestmark = pytest.mark.broker

VERSIONS = pytest.mark.parametrize("version", ["5", "3.1.1"])
SESSION_TAKEN_OVER, SERVER_SHUTTING_DOWN = b"\x8e", b"\x8b"


@pytest.fixture(autouse=True)
def no_long_waits(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("quietmill.intake.attempts.FIRST_DELAY_SECONDS", 0.05)


def silence(talk: Conversation) -> None:
    """Hear what comes, to the end."""
    while True:
        talk.hear()


def test_connecting_never_holds_the_loop(monkeypatch: pytest.MonkeyPatch) -> None:
    """A name service or broker that never answers costs a thread, not a turn."""
    release, threads = threading.Event(), []

    def never(*_args: object, **_more: object) -> None:
        threads.append(threading.current_thread())
        release.wait(60)
        raise OSError("released")

    monkeypatch.setattr(socket, "create_connection", never)
    with connection("mqtt://192.0.2.1:1883") as link:
        drive(link, lambda: threads, "an attempt")
        assert [link.take(0.0) for _ in range(50)] == [[]] * 50
        assert [thread.name for thread in threads] == ["connect"]
        release.set()
    threads[0].join(60)


def test_an_absent_broker_is_named_once_and_tried_again() -> None:
    port = free_port()
    with capture_logs() as logs, connection(f"mqtt://127.0.0.1:{port}") as link:
        drive(link, lambda: link._attempts.failures >= 3, "three attempts")
        assert f"nothing listens at 127.0.0.1:{port}" in link.trouble
    assert [entry["event"] for entry in logs] == ["no connection to the broker"]


def test_a_broker_that_comes_late_is_found(tmp_path: Path) -> None:
    port = free_port()
    with capture_logs() as logs, connection(f"mqtt://127.0.0.1:{port}") as link:
        drive(link, lambda: link._attempts.failures >= 2, "two attempts")
        with running(tmp_path, f"listener {port} 127.0.0.1"):
            drive(link, lambda: ready(link))
    assert [entry["failed_attempts"] >= 2 for entry in logs if "failed_attempts" in entry] == [True]


def test_a_peer_that_never_answers_is_given_up(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(module, "ANSWER_SECONDS", 0.2)
    with scripted(silence) as peer, capture_logs() as logs, connection(peer.url) as link:
        drive(link, lambda: peer.connections >= 3, "three attempts")
    assert reasons(logs).count("did not answer") == 1


@VERSIONS
@pytest.mark.parametrize(
    "answer",
    [
        b"HTTP/1.1 400 Bad Request\r\n\r\n",
        b"\xff" * 64,
        b"\x00" * 64,
        b"\x20\x00",
        b"\x20\x02\x00\x63",
        b"\x20\x09\x00\x00\x06\x99\x99\x99\x99\x99\x99",
        *(random.Random(seed).randbytes(200) for seed in range(12)),
    ],
)
def test_a_peer_that_speaks_no_mqtt_is_outlived(version: str, answer: bytes) -> None:
    def script(talk: Conversation) -> None:
        talk.hear()
        talk.say(answer)

    with scripted(script) as peer, capture_logs() as logs, connection(peer.url, version=version) as link:
        drive(link, lambda: peer.connections >= 2, "another attempt")
        assert not link.connected
    assert "broker.url" in reasons(logs) or "refuses the connection" in reasons(logs)


@VERSIONS
def test_a_bad_password_is_said_so_and_a_new_one_is_read(tmp_path: Path, version: str) -> None:
    secret = tmp_path / "secret"
    secret.write_text("wrong\n")
    account = {"user": "press", "password_file": secret, "version": version}
    users = password_file(tmp_path, "press", "right")
    with (
        running(tmp_path / "b", f"password_file {users}") as broker,
        capture_logs() as logs,
        connection(broker.url, **account) as link,
    ):
        drive(link, lambda: link._attempts.failures >= 3, "three attempts")
        assert "broker.password_file" in link.trouble
        secret.write_text("right\n")
        drive(link, lambda: ready(link), "the right password to be read")
    assert reasons(logs).count("broker.password_file") == 1


def test_a_password_file_that_cannot_be_read_is_named(tmp_path: Path) -> None:
    file = tmp_path / "secret"
    with pytest.raises(CredentialsError, match=r"password_file .*secret cannot be read: No such file"):
        connection("mqtt://127.0.0.1", user="press", password_file=file).__enter__()
    file.write_bytes(b"\xff\xfe")
    with pytest.raises(CredentialsError, match="is not UTF-8 text"):
        connection("mqtt://127.0.0.1", user="press", password_file=file).__enter__()


def test_a_password_file_that_vanishes_is_a_trouble_and_no_end(tmp_path: Path) -> None:
    file = tmp_path / "secret"
    file.write_text("right")
    with connection("mqtt://127.0.0.1", user="press", password_file=file) as link:
        file.unlink()
        drive(link, lambda: link._attempts.failures >= 2, "two attempts")
        assert "cannot be read" in link.trouble


@pytest.mark.parametrize(("version", "code"), [("5", b"\x84\x00"), ("5", b"\x01"), ("3.1.1", b"\x01")])
def test_a_broker_of_another_protocol_version_is_said_so(version: str, code: bytes) -> None:
    def script(talk: Conversation) -> None:
        talk.hear()
        talk.say(packet(CONNACK, b"\0" + code))

    with scripted(script) as peer, capture_logs() as logs, connection(peer.url, version=version) as link:
        drive(link, lambda: logs, "the log line")
    assert "broker.version" in reasons(logs)


def test_two_services_of_one_client_id_are_told_and_slow_down(tmp_path: Path) -> None:
    with (
        running(tmp_path) as broker,
        capture_logs() as logs,
        connection(broker.url) as one,
        connection(broker.url) as other,
    ):
        drive(one, lambda: other.take(0.0) or reasons(logs).count("another client") >= 2, "the two to fight")
        drive(one, lambda: other.take(0.0) or min(one._attempts._delay, other._attempts._delay) > 0.3)
    assert reasons(logs).count("another client may use the id 'quietmill'") == 2
    assert "give each service a broker.client_id of its own" in reasons(logs)


@pytest.mark.parametrize(
    ("code", "said", "delay"),
    [
        (SESSION_TAKEN_OVER, "another client has connected as 'quietmill'", 0.2),
        (SERVER_SHUTTING_DOWN, "the broker closed the connection (Server shutting down)", 0.1),
    ],
)
def test_what_a_broker_says_on_parting_is_passed_on_and_a_takeover_slows_down_at_once(
    code: bytes, said: str, delay: float
) -> None:
    def script(talk: Conversation) -> None:
        talk.accept("5")
        talk.say(packet(DISCONNECT, code))

    with scripted(script) as peer, capture_logs() as logs, connection(peer.url) as link:
        drive(link, lambda: link._attempts._short_lives == 2, "two connections")
        assert link._attempts._delay == pytest.approx(delay)
    assert reasons(logs).count(said) == 1


@VERSIONS
def test_a_broker_that_falls_silent_is_left_after_the_keepalive(version: str) -> None:
    """paho reports this twice."""

    def script(talk: Conversation) -> None:
        talk.accept(version)
        silence(talk)

    settings = {"version": version, "keepalive": "1s"}
    with scripted(script) as peer, capture_logs() as logs, connection(peer.url, **settings) as link:
        drive(link, lambda: peer.connections >= 2, "another attempt")
    assert reasons(logs) == "the broker has not answered for 1 s (broker.keepalive)"


@VERSIONS
def test_refused_subscriptions_are_said_in_one_line_and_keep_the_service_unready(version: str) -> None:
    def script(talk: Conversation) -> None:
        talk.accept(version)
        asked = talk.hear()
        assert asked.kind == SUBSCRIBE
        head = asked.body[:2] + (b"\0" if version == "5" else b"")
        talk.say(packet(SUBACK, head + (b"\x01\x87" if version == "5" else b"\x01\x80")))
        silence(talk)

    with scripted(script) as peer, capture_logs() as logs, connection(peer.url, version=version) as link:
        drive(link, lambda: "refused" in link.trouble, "the refusal")
        assert f"refused 1 of 2 subscriptions: {TOPICS[1]}" in link.trouble
    assert [entry["reason"] for entry in logs if entry["log_level"] == "error"] == [link._subscriptions.trouble]


def test_a_topic_that_is_not_utf_8_disturbs_nothing_else() -> None:
    def script(talk: Conversation) -> None:
        talk.accept("5")
        talk.hear()
        talk.say(packet(PUBLISH, b"\0\x02\xff\xfe\0\x01\0" + b"1", flags=2))
        talk.say(packet(PUBLISH, b"\0\x01a\0\x02\0" + b"2", flags=2))
        silence(talk)

    with scripted(script) as peer, connection(peer.url, topics=("a",)) as link:
        taken = take(link, 2)
    assert [(message.topic, message.payload) for message in taken] == [("", b"1"), ("a", b"2")]


def test_a_refused_publication_is_counted_and_said_once() -> None:
    def script(talk: Conversation) -> None:
        talk.accept("5")
        talk.hear()
        while (heard := talk.hear()).kind == PUBLISH:
            talk.say(packet(PUBACK, heard.number.to_bytes(2, "big") + b"\x87\x00"))

    with scripted(script) as peer, capture_logs() as logs, connection(peer.url) as link:
        drive(link, lambda: link.connected)
        for _ in range(3):
            link.publish("quietmill/signals/press1.force", b"{}", False, None)
        drive(link, lambda: link.publications_refused == 3, "the refusals")
    assert reasons(logs) == "Not authorized"


@pytest.mark.parametrize(("properties", "window"), [(b"\x21\x00\x03", 3), (b"", 20), (b"\x21\xff\xff", 20)])
def test_no_more_is_published_ahead_than_the_broker_allows(properties: bytes, window: int) -> None:
    def script(talk: Conversation) -> None:
        talk.accept("5", properties)
        silence(talk)

    with scripted(script) as peer, connection(peer.url) as link:
        drive(link, lambda: link.connected)
        assert link.window == window


def test_a_socket_made_too_late_is_closed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The service ends while an attempt is under way; warnings are errors, so a socket left open would fail this."""
    arrived, release, made = threading.Event(), threading.Event(), []

    def late(*_args: object) -> socket.socket:
        arrived.set()
        release.wait(60)
        made.append(socket.socket())
        return made[0]

    monkeypatch.setattr(socket, "create_connection", late)
    with connection("mqtt://127.0.0.1") as link:
        drive(link, arrived.is_set, "an attempt")
    release.set()
    for thread in [thread for thread in threading.enumerate() if thread.name == "connect"]:
        thread.join(60)
    assert made[0].fileno() == -1


def test_the_connection_lives_on_after_all_that(tmp_path: Path) -> None:
    """A port that first belongs to a peer without manners and then to a broker."""
    port = free_port()
    with connection(f"mqtt://127.0.0.1:{port}") as link:
        with scripted(lambda talk: talk.say(b"\xff" * 64), port) as peer:
            drive(link, lambda: peer.connections >= 2, "another attempt")
        with running(tmp_path, f"listener {port} 127.0.0.1"), Peer(port) as sender:
            drive(link, lambda: ready(link))
            sender.publish((TOPICS[0], "1"))
            assert payloads(take(link, 1)) == ["1"]
