"""The session at a real Mosquitto: what comes, what is acknowledged, and what outlives a connection."""

import subprocess
import threading
import time
from pathlib import Path

import pytest
from structlog.testing import capture_logs

from broker import PATIENCE_SECONDS, Mosquitto, Peer, running, wait_for
from intake.link import TOPICS, WILL, connection, drive, payloads, ready, take
from packets import PUBACK, SUBSCRIBE, UNSUBSCRIBE
from quietmill.intake import broker as module
from wiretap import tapped

pytestmark = pytest.mark.broker

VERSIONS = pytest.mark.parametrize("version", ["5", "3.1.1"])


@pytest.fixture(autouse=True)
def no_long_waits(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("quietmill.intake.attempts.FIRST_DELAY_SECONDS", 0.1)


@VERSIONS
def test_messages_of_exact_topics_come_with_qos_1_in_order(tmp_path: Path, version: str) -> None:
    with running(tmp_path) as broker, connection(broker.url, version=version) as link, Peer(broker.port) as peer:
        drive(link, lambda: ready(link))
        peer.publish(*((TOPICS[place % 2], str(place)) for place in range(200)), ("tiles/press/10", "elsewhere"))
        taken = []
        while len(taken) < 200:
            taken += (batch := take(link, 1))
            link.acknowledge(batch)
        assert payloads(taken) == [str(place) for place in range(200)]
        assert {(message.qos, message.dup, message.epoch) for message in taken} == {(1, False, 1)}


@VERSIONS
def test_acknowledgements_go_out_in_the_order_of_arrival_and_not_before_they_are_asked_for(
    tmp_path: Path, version: str
) -> None:
    with (
        running(tmp_path, "max_inflight_messages 100") as broker,
        tapped(broker.port) as wire,
        connection(wire.url, version=version) as link,
        Peer(broker.port) as peer,
    ):
        drive(link, lambda: ready(link))
        peer.publish(*((TOPICS[0], str(place)) for place in range(100)))
        arrived = take(link, 100)
        assert wire.numbers(PUBACK) == []
        link.acknowledge(arrived[:60])
        link.acknowledge(arrived[60:])
        link.send()
        wait_for(lambda: len(wire.numbers(PUBACK)) >= 100, what="the acknowledgements")
        assert wire.numbers(PUBACK) == [message.mid for message in arrived]


@VERSIONS
def test_what_was_not_acknowledged_comes_again_and_nothing_else(tmp_path: Path, version: str) -> None:
    with running(tmp_path, "max_inflight_messages 50") as broker, Peer(broker.port) as peer:
        with connection(broker.url, version=version) as link:
            drive(link, lambda: ready(link))
            peer.publish(*((TOPICS[0], str(place)) for place in range(30)))
            taken = take(link, 30)
            link.acknowledge(taken[:10])
        with connection(broker.url, version=version) as link:
            again = take(link, 20)
        assert payloads(again) == [str(place) for place in range(10, 30)]
        assert all(message.dup for message in again)


@VERSIONS
def test_nothing_of_an_older_connection_is_acknowledged(tmp_path: Path, version: str) -> None:
    """Catches an acknowledgement by packet number alone: the new connection uses the same numbers."""
    with (
        running(tmp_path) as broker,
        tapped(broker.port) as wire,
        connection(wire.url, version=version) as link,
        Peer(broker.port) as peer,
    ):
        drive(link, lambda: ready(link))
        peer.publish(*((TOPICS[0], str(place)) for place in range(5)))
        old = take(link, 5)
        wire.cut()
        drive(link, lambda: not link.connected)
        again = take(link, 5)
        link.acknowledge(old)
        link.acknowledge(again[:2])
        link.send()
        wait_for(lambda: wire.numbers(PUBACK), what="the acknowledgements")
        assert wire.numbers(PUBACK, 1) == [message.mid for message in again[:2]]
        assert [message.epoch for message in again] == [old[0].epoch + 1] * 5


@VERSIONS
def test_readings_sent_while_the_service_is_away_are_kept_for_it(tmp_path: Path, version: str) -> None:
    with running(tmp_path) as broker, Peer(broker.port) as peer:
        with connection(broker.url, version=version) as link:
            drive(link, lambda: ready(link))
        peer.publish((TOPICS[0], "after a clean stop"))
        with tapped(broker.port) as wire, connection(wire.url, version=version) as link:
            taken = take(link, 1)
            link.acknowledge(taken)
            link.send()
            wait_for(lambda: wire.numbers(PUBACK), what="the acknowledgement")
            wire.cut()
            peer.publish((TOPICS[0], "after a cut"))
        with connection(broker.url, version=version) as link:
            assert payloads(taken + take(link, 1)) == ["after a clean stop", "after a cut"]


@VERSIONS
def test_a_broker_that_restarts_is_found_again_with_the_session(tmp_path: Path, version: str) -> None:
    broker = Mosquitto(tmp_path).start()
    try:
        with connection(broker.url, version=version) as link, capture_logs() as logs:
            drive(link, lambda: ready(link))
            broker.stop()
            drive(link, lambda: not link.connected)
            assert "no connection to the broker" in link.trouble
            broker.start()
            with Peer(broker.port) as peer:
                peer.publish((TOPICS[0], "back"))
            assert payloads(take(link, 1)) == ["back"]
            assert (link.epoch, link.sessions_lost) == (2, 1)
        assert [entry["session_present"] for entry in logs if "session_present" in entry] == [False, True]
    finally:
        broker.stop()


def test_a_broker_that_forgot_the_session_is_a_possible_gap(tmp_path: Path) -> None:
    broker = Mosquitto(tmp_path / "one").start()
    try:
        with connection(broker.url) as link, capture_logs() as logs:
            drive(link, lambda: ready(link))
            broker.stop()
            drive(link, lambda: not link.connected)
            broker = Mosquitto(tmp_path / "other", port=broker.port).start()
            drive(link, lambda: ready(link))
            assert link.sessions_lost == 2
        assert [entry["event"] for entry in logs].count("the broker has lost the session") == 1
    finally:
        broker.stop()


def test_a_process_that_finds_its_session_still_has_everything_to_tell(tmp_path: Path) -> None:
    """Catches status told only to brokers without a session: it may have changed while the service was away."""
    with running(tmp_path) as broker:
        with connection(broker.url) as link:
            drive(link, lambda: ready(link))
        with connection(broker.url) as link, capture_logs() as logs:
            drive(link, lambda: ready(link))
            assert link.sessions_lost == 1
        assert "the broker has lost the session" not in [entry["event"] for entry in logs]


def test_a_retained_message_comes_once_for_a_session(tmp_path: Path) -> None:
    with running(tmp_path) as broker, Peer(broker.port) as peer:
        peer.publish((TOPICS[0], "old"), retain=True)
        with connection(broker.url) as link:
            first = take(link, 1)
            assert first[0].retain
            link.acknowledge(first)
        with connection(broker.url) as link:
            drive(link, lambda: ready(link))
            peer.publish((TOPICS[0], "new"))
            assert payloads(take(link, 1)) == ["new"]


@VERSIONS
def test_a_topic_that_left_the_settings_leaves_the_session(tmp_path: Path, version: str) -> None:
    with running(tmp_path) as broker, Peer(broker.port) as peer:
        with connection(broker.url, version=version) as link:
            drive(link, lambda: ready(link))
        with tapped(broker.port) as wire, connection(wire.url, TOPICS[:1], version=version) as link:
            drive(link, lambda: ready(link))
            peer.publish((TOPICS[1], "1"))
            assert payloads(take(link, 1)) == ["1"]
            wait_for(lambda: link.take(0.02) or wire.numbers(UNSUBSCRIBE), what="the farewell to the topic")
            peer.publish((TOPICS[1], "2"), (TOPICS[0], "3"))
            assert payloads(take(link, 1)) == ["3"]


@VERSIONS
def test_ten_thousand_topics_are_subscribed_to_in_packets_of_bounded_size(tmp_path: Path, version: str) -> None:
    topics = tuple(f"tiles/press/{number}" for number in range(10_000))
    with (
        running(tmp_path) as broker,
        tapped(broker.port) as wire,
        connection(wire.url, topics, version=version) as link,
        Peer(broker.port) as peer,
    ):
        drive(link, lambda: ready(link))
        assert max(len(packet.body) for packet in wire.said[0] if packet.kind == SUBSCRIBE) < 16_384
        peer.publish((topics[0], "first"), (topics[-1], "last"))
        assert sorted(payloads(take(link, 2))) == ["first", "last"]


def test_a_batch_ends_when_it_is_full_and_the_rest_waits_for_nothing(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(module, "BATCH_MESSAGES", 10)
    with running(tmp_path, "max_inflight_messages 100") as broker, connection(broker.url) as link:
        drive(link, lambda: ready(link))
        with Peer(broker.port) as peer:
            peer.publish(*((TOPICS[0], str(place)) for place in range(50)))
        sizes, begin = [], time.monotonic()
        while sum(sizes) < 50:
            sizes.append(len(link.take(PATIENCE_SECONDS)))
        assert max(sizes) == 10
        assert time.monotonic() - begin < PATIENCE_SECONDS


def test_qos_0_is_counted(tmp_path: Path) -> None:
    with running(tmp_path) as broker, connection(broker.url) as link, Peer(broker.port) as peer:
        drive(link, lambda: ready(link))
        peer.publish((TOPICS[0], "1"), qos=0)
        take(link, 1)
        assert link.messages_qos0 == 1


def test_the_loop_can_be_woken(tmp_path: Path) -> None:
    with running(tmp_path) as broker, connection(broker.url) as link:
        drive(link, lambda: ready(link))
        threading.Timer(0.1, link.wake).start()
        begin = time.monotonic()
        link.take(300)
        assert time.monotonic() - begin < 150


@VERSIONS
def test_a_cut_connection_leaves_the_will_and_a_farewell_does_not(tmp_path: Path, version: str) -> None:
    with running(tmp_path) as broker, tapped(broker.port) as wire, Peer(broker.port, WILL.topic) as peer:
        with connection(wire.url, version=version) as link:
            drive(link, lambda: ready(link))
        with connection(wire.url, version=version) as link:
            drive(link, lambda: ready(link))
            assert peer.received == []
            wire.cut()
            wait_for(lambda: peer.received, what="the will")
        command = ["mosquitto_sub", "-p", str(broker.port), "-t", WILL.topic, "-C", "1", "-W", "30"]
        assert subprocess.run(command, check=True, capture_output=True).stdout.strip() == WILL.payload
