"""Nothing lost, order kept, and never twice on one healthy connection."""

from collections.abc import Callable
from pathlib import Path

import paho.mqtt.client as mqtt
import pytest
from paho.mqtt.enums import CallbackAPIVersion

from broker import Mosquitto, Peer, running, wait_for
from intake.link import connection, drive
from packets import PUBLISH
from quietmill.outlets.publisher import OUTBOX_LIMIT, Publisher
from wiretap import tapped

VERSIONS = pytest.mark.parametrize("version", ["5", "3.1.1"])
EVENTS = "quietmill/signals/press1.force"


class Link:
    """A connection by hand: what it was handed, and acknowledgements when a test wants them."""

    def __init__(self, window: int = 20) -> None:
        self.connected = True
        self.window = window
        self.epoch = 1
        self.on_acknowledged: Callable[[int], None] = lambda _mid: None
        self.handed: list[tuple[str, bytes, bool, str | None]] = []

    def publish(self, topic: str, payload: bytes, retain: bool, content_type: str | None) -> int:
        self.handed.append((topic, payload, retain, content_type))
        return len(self.handed)

    def payloads(self, topic: str = EVENTS) -> list[str]:
        return [payload.decode() for heard, payload, _, _ in self.handed if heard == topic]


@pytest.fixture(autouse=True)
def no_long_waits(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("quietmill.intake.attempts.FIRST_DELAY_SECONDS", 0.1)


def test_documents_go_to_their_topics_as_what_they_are() -> None:
    link = Link()
    publisher = Publisher(link, "mill/a", "press-hall")
    publisher.put(publisher.event_letter("press1.force", b"raised"))
    publisher.put(publisher.status_letter("press1.force", b"signal"))
    publisher.turn()
    assert link.handed == [
        ("mill/a/service/press-hall", b'{"state":"online"}', True, "application/json"),
        ("mill/a/signals/press1.force", b"raised", False, "application/cloudevents+json"),
        ("mill/a/status/press1.force", b"signal", True, "application/json"),
    ]


def test_no_more_than_a_window_is_handed_over_ahead_of_acknowledgements() -> None:
    link = Link(window=3)
    publisher = Publisher(link, "quietmill", "quietmill")
    for place in range(9):
        publisher.put(publisher.event_letter("press1.force", str(place).encode()))
    publisher.turn()
    assert link.payloads() == ["0", "1"]
    link.on_acknowledged(1)
    publisher.turn()
    assert link.payloads() == ["0", "1", "2"]
    assert publisher.outstanding == 9


def test_events_wait_while_there_is_no_connection() -> None:
    link = Link()
    link.connected = False
    publisher = Publisher(link, "quietmill", "quietmill")
    publisher.put(publisher.event_letter("press1.force", b"1"))
    publisher.turn()
    assert (link.handed, publisher.outstanding) == ([], 1)
    link.connected = True
    publisher.turn()
    assert link.payloads() == ["1"]


def test_a_retained_message_replaces_one_that_still_waits_and_events_never_do() -> None:
    link = Link()
    publisher = Publisher(link, "quietmill", "quietmill")
    for word in (b"1", b"2"):
        publisher.put(publisher.status_letter("press1.force", word))
        publisher.put(publisher.event_letter("press1.force", word))
    publisher.turn()
    assert [(topic, payload) for topic, payload, _, _ in link.handed[1:]] == [
        (EVENTS, b"1"),
        ("quietmill/status/press1.force", b"2"),
        (EVENTS, b"2"),
    ]


def test_too_many_events_fill_the_outbox_and_statuses_do_not() -> None:
    link = Link(window=1)
    publisher = Publisher(link, "quietmill", "quietmill")
    for number in range(OUTBOX_LIMIT + 1):
        publisher.put(publisher.status_letter(f"press{number}.force", b"in_control"))
    assert not publisher.full
    for _ in range(OUTBOX_LIMIT):
        publisher.put(publisher.event_letter("press1.force", b""))
    assert not publisher.full
    publisher.put(publisher.event_letter("press1.force", b""))
    assert publisher.full
    for mid in range(publisher.outstanding + 1):
        publisher.turn()
        link.on_acknowledged(mid + 1)
    assert (publisher.full, publisher.outstanding) == (False, 0)


def test_each_connection_is_greeted_once_with_the_present_state() -> None:
    """Catches `online` after the farewell, which the broker would retain for a service that is gone."""
    link = Link()
    publisher = Publisher(link, "quietmill", "quietmill")
    publisher.turn()
    publisher.turn()
    publisher.service("offline")
    publisher.turn()
    link.epoch = 2
    publisher.turn()
    states = link.payloads("quietmill/service/quietmill")
    assert [state.split('"')[3] for state in states] == ["online", "offline", "offline"]


@pytest.mark.broker
@VERSIONS
def test_every_event_comes_once_and_in_order_on_one_connection(tmp_path: Path, version: str) -> None:
    with (
        running(tmp_path) as broker,
        Peer(broker.port, "quietmill/#") as peer,
        connection(broker.url, version=version) as link,
    ):
        publisher = Publisher(link, "quietmill", "quietmill")
        for place in range(300):
            publisher.put(publisher.event_letter("press1.force", str(place).encode()))
        drive(link, lambda: publisher.turn() or not publisher.outstanding, "the outbox to empty")
        wait_for(lambda: len(peer.payloads(EVENTS)) >= 300, what="the events")
        assert peer.payloads(EVENTS) == [str(place).encode() for place in range(300)]


@pytest.mark.broker
@VERSIONS
@pytest.mark.parametrize("forgets", [False, True])
def test_no_event_is_lost_or_out_of_order_when_the_wire_is_cut_again_and_again(
    tmp_path: Path, version: str, forgets: bool
) -> None:
    with (
        running(tmp_path) as broker,
        tapped(broker.port) as wire,
        Peer(broker.port, "quietmill/#") as peer,
        connection(wire.url, version=version) as link,
    ):
        publisher = Publisher(link, "quietmill", "quietmill")
        for place in range(400):
            publisher.put(publisher.event_letter("press1.force", str(place).encode()))
        cuts = 0

        def turn() -> bool:
            nonlocal cuts
            publisher.turn()
            link.send()
            if len(wire.said) == cuts + 1 and len(wire.numbers(PUBLISH)) > 60 and cuts < 4:
                cuts += 1
                wire.cut()
                if forgets:
                    forget(broker)
            return not publisher.outstanding

        drive(link, turn, "the outbox to empty")
        wait_for(lambda: b"399" in peer.payloads(EVENTS), what="the last event")
        assert cuts == 4
        assert list(dict.fromkeys(peer.payloads(EVENTS))) == [str(place).encode() for place in range(400)]


def forget(broker: Mosquitto) -> None:
    """Make the broker forget the service's session."""
    client = mqtt.Client(CallbackAPIVersion.VERSION2, client_id="quietmill", protocol=mqtt.MQTTv311, clean_session=True)
    client.connect("127.0.0.1", broker.port)
    while not client.is_connected():
        client.loop(0.05)
    client.disconnect()
    client.loop(0.05)


@pytest.mark.broker
def test_a_broker_that_restarts_has_the_last_word_of_everything(tmp_path: Path) -> None:
    broker = Mosquitto(tmp_path).start()
    try:
        with connection(broker.url) as link:
            publisher = Publisher(link, "quietmill", "quietmill")
            drive(link, lambda: publisher.turn() or (link.connected and not publisher.outstanding), "the greeting")
            broker.stop()
            drive(link, lambda: not link.connected)
            for word in (b"signal", b"in_control"):
                publisher.put(publisher.status_letter("press1.force", word))
            broker.start()
            drive(link, lambda: publisher.turn() or not publisher.outstanding, "the outbox to empty")
            with Peer(broker.port, "quietmill/#") as late:
                wait_for(lambda: len(late.received) >= 2, what="the retained documents")
                assert sorted(late.received) == [
                    ("quietmill/service/quietmill", b'{"state":"online"}', True),
                    ("quietmill/status/press1.force", b"in_control", True),
                ]
    finally:
        broker.stop()


@pytest.mark.broker
def test_the_content_type_arrives_with_an_event(tmp_path: Path) -> None:
    seen: list[str] = []
    with running(tmp_path) as broker, connection(broker.url) as link:
        publisher = Publisher(link, "quietmill", "quietmill")
        listener = mqtt.Client(CallbackAPIVersion.VERSION2, protocol=mqtt.MQTTv5)
        listener.on_message = lambda _c, _d, message: seen.append(message.properties.ContentType)
        listener.on_subscribe = lambda *_: publisher.put(publisher.event_letter("press1.force", b"{}"))
        listener.connect("127.0.0.1", broker.port)
        listener.subscribe(EVENTS)
        drive(link, lambda: publisher.turn() or listener.loop(0.02) or seen, "the event")
        listener.disconnect()
    assert seen == ["application/cloudevents+json"]
