"""The connection to the broker: one persistent session, driven by the loop, renewed for ever.

The loop calls `take`, which waits for the socket, drives paho and returns what came. It never waits for a connection:
`attempts.py` makes those in a thread and hands over a ready socket.
"""

import contextlib
import selectors
import socket
import time
from collections.abc import Callable, Sequence
from typing import Any, Final

import structlog
from paho.mqtt import client as mqtt
from paho.mqtt.reasoncodes import ReasonCode

from quietmill.intake.attempts import ANSWER_SECONDS, STEADY_SECONDS, Attempts
from quietmill.intake.client import Client, Will
from quietmill.intake.message import Message
from quietmill.intake.subscriptions import Subscriptions
from quietmill.intake.trouble import in_words, loss_in_words, refusal_in_words, silence_in_words, taken_over
from quietmill.intake.wire import BufferedSocket, RawSocket
from quietmill.settings import Broker

__all__ = ["Connection", "Will"]

log = structlog.get_logger("quietmill.broker")

BATCH_MESSAGES: Final = 4096
BATCH_BYTES: Final = 16 * 1024 * 1024
WINDOW: Final = 20
"""Messages published and not yet acknowledged, unless the broker allows fewer."""


class Connection:
    """The service's session at its broker.

    `topics` are subscribed to with QoS 1. `take` is called again and again by one thread; `wake` may be called by any.
    Raises `ValueError` where password or certificates cannot be used.
    """

    def __init__(self, broker: Broker, topics: Sequence[str], will: Will) -> None:
        self._broker = broker
        self._client = self._listening(Client(broker, will))
        self.epoch = 0
        """Counts connections; a message is acknowledged only on its own."""
        self.connected = False
        self.sessions_lost = 0
        """Counts connections after which all status must be told anew: the first, and each without a session."""
        self.sessions_begun = 0
        """Counts connections to a broker that knew no session of ours; packet ids begin anew with each."""
        self.messages_qos0 = 0
        self.publications_refused = 0
        """Counts what the broker would not publish for us."""
        self.window = WINDOW
        self.on_acknowledged: Callable[[int], None] = lambda _mid: None
        """Called with the mid of each published message that the broker has acknowledged."""
        self._subscriptions = Subscriptions(topics)
        self._inbox: list[Message] = []
        self._inbox_bytes = 0
        self._socket: BufferedSocket | None = None
        self._interest = 0
        self._answer_due = 0.0
        self._since = 0.0
        self._trouble = "connecting for the first time"
        self._said = ""
        self._refusal = ""
        self._refused_before: set[str] = set()
        self._closing = False
        self._suspended = False
        self._selector = selectors.DefaultSelector()
        self._wakes, self._waker = socket.socketpair()
        self._wakes.setblocking(False)
        self._waker.setblocking(False)
        self._selector.register(self._wakes, selectors.EVENT_READ)
        self._attempts = Attempts(self._client.make_socket, self.wake)

    def _listening(self, client: Client) -> Client:
        client.on_connect = self._on_connect
        client.on_disconnect = self._on_disconnect
        client.on_message = self._on_message
        client.on_publish = self._on_publish
        client.on_subscribe = self._on_subscribe
        return client

    # what the rest of the service sees

    @property
    def trouble(self) -> str:
        """Why readings may not be coming in, in plain words; empty when all is well."""
        if not self.connected:
            return f"no connection to the broker: {self._trouble}"
        return self._subscriptions.trouble

    def wake(self) -> None:
        """End the wait of `take` from another thread or a signal handler."""
        with contextlib.suppress(OSError):  # full of wakes already, or closed
            self._waker.send(b"w")

    def take(self, timeout_seconds: float) -> list[Message]:
        """Wait for at most so long, then return what came: until the socket ran dry or the batch is full.

        Never waits for more once something is there, and never for a connection.
        """
        self._turn_towards_broker()
        if self._socket is not None and not self._socket.dry:
            timeout_seconds = 0.0
        for key, _ in self._selector.select(timeout_seconds):
            if key.fileobj is self._wakes:
                with contextlib.suppress(BlockingIOError):
                    while self._wakes.recv(4096):
                        pass
        self._turn_towards_broker()
        if self._socket is not None:
            self._read(self._socket)
        if self._socket is not None:
            self._client.loop_misc()
        self.send()
        batch, self._inbox, self._inbox_bytes = self._inbox, [], 0
        return batch

    def acknowledge(self, messages: Sequence[Message]) -> None:
        """Acknowledge messages of QoS 1 in the order given, which is that of arrival; none of an older connection."""
        for message in messages:
            if message.qos == 1 and message.epoch == self.epoch and self.connected:
                self._client.ack(message.mid, 1)

    def publish(self, topic: str, payload: bytes, retain: bool, content_type: str | None) -> int:
        """Hand a message to the broker with QoS 1; return its mid. paho sends it again on the next connection."""
        return self._client.say(topic, payload, retain, content_type)

    def send(self) -> None:
        """Send what waits to be sent."""
        if self._socket is None:
            return
        if self._client.want_write():
            self._client.loop_write()
        if self._socket is not None:
            self._socket.flush()
            self._watch(self._socket)

    def listen_to(self, topics: Sequence[str]) -> None:
        """Follow other topics from now on; the session forgets those that are not among them."""
        before, self._subscriptions = self._subscriptions, Subscriptions(topics)
        if self.connected:
            added = [topic for topic in topics if topic not in before.wanted]
            self._subscriptions.begin(self._client.subscribe_to(added))
            self._client.unsubscribe_from(sorted(before.wanted - self._subscriptions.wanted))
            self.send()

    def suspend(self) -> None:
        """Hang up and stay away until `resume`; the broker keeps the session and queues for it.

        To stop reading and keep the connection is not possible: a broker drops a client that reads no ping replies.
        """
        if not self._suspended:
            self._suspended = True
            self._trouble = "the service holds more readings than it can keep"
            self._drop()

    def resume(self) -> None:
        """Come back after `suspend`."""
        self._suspended = False

    def close(self) -> None:
        """Disconnect; the broker keeps the session."""
        self._closing = True
        self._attempts.close()
        if self._socket is not None:
            self._stop_watching(self._socket)
            self._client.disconnect()
            self._client.loop_write()
            self._socket.close()
            self._socket = None
        self.connected = False
        self._selector.close()
        self._wakes.close()
        self._waker.close()

    # connecting

    def _turn_towards_broker(self) -> None:
        """Begin, finish or give up an attempt to connect."""
        now = time.monotonic()
        if self._socket is None:
            made = self._attempts.turn(now)
            if isinstance(made, BaseException):
                self._failed(made)
            elif made is not None:
                self._introduce(made, now)
        elif not self.connected and now >= self._answer_due:
            self._failed(TimeoutError())

    def _introduce(self, made: RawSocket, now: float) -> None:
        """Take the socket that an attempt made, and introduce ourselves to the broker."""
        self._answer_due = now + ANSWER_SECONDS
        self._socket = self._client.ready = BufferedSocket(made)
        self.epoch += 1
        self._refusal = ""
        try:
            self._client.reconnect()
        except (OSError, ValueError) as error:
            self._failed(error)
        else:
            self.send()

    def _failed(self, error: BaseException) -> None:
        """Give up a connection, or the attempt to make one."""
        self._say(in_words(error, self._broker))
        self._drop()

    def _say(self, trouble: str) -> None:
        """Log a trouble once, however often it repeats."""
        self._trouble = trouble
        if trouble != self._said:
            self._said = trouble
            log.warning("no connection to the broker", reason=trouble, url=self._broker.url)

    def _drop(self, contested: bool = False) -> None:
        """Let go of the socket, and set the time of the next attempt."""
        if self._socket is not None:
            self._stop_watching(self._socket)
            self._socket.close()
            self._socket = None
        now = time.monotonic()
        self._attempts.ended(now, now - self._since if self.connected else None, contested)
        self.connected = False

    def _watch(self, sock: BufferedSocket) -> None:
        """Tell the selector what to wait for."""
        interest = selectors.EVENT_READ | (selectors.EVENT_WRITE if sock.unsent else 0)
        if interest == self._interest:
            return
        if self._interest:
            self._selector.modify(sock, interest)
        else:
            self._selector.register(sock, interest)
        self._interest = interest

    def _stop_watching(self, sock: BufferedSocket) -> None:
        if self._interest:
            self._selector.unregister(sock)
        self._interest = 0

    def _read(self, sock: BufferedSocket) -> None:
        """Read until the socket is dry or the batch is full."""
        sock.dry = False
        try:
            while not sock.dry and len(self._inbox) < BATCH_MESSAGES and self._inbox_bytes < BATCH_BYTES:
                if self._client.loop_read() != mqtt.MQTT_ERR_SUCCESS or self._socket is not sock:
                    break
        except Exception as error:  # noqa: BLE001  paho may choke on what is no MQTT; the loop must not
            self._failed(error)

    # paho's callbacks: they append and note, and never raise

    def _on_connect(
        self, _client: Any, _data: Any, flags: mqtt.ConnectFlags, reason: ReasonCode, properties: Any
    ) -> None:
        if reason.is_failure:
            self._refusal = refusal_in_words(reason)
            return
        known_before = self._since > 0
        self.connected = True
        self._since = time.monotonic()
        self.window = max(1, min(WINDOW, getattr(properties, "ReceiveMaximum", WINDOW)))
        self._refused_before.clear()
        if not (known_before and flags.session_present):
            self.sessions_lost += 1
        self.sessions_begun += not flags.session_present
        if known_before and not flags.session_present:
            log.warning(
                "the broker has lost the session", meaning="possible gap: readings sent meanwhile may be missing"
            )
        log.info(
            "connected to the broker",
            url=self._broker.url,
            session_present=flags.session_present,
            failed_attempts=self._attempts.failures,
        )
        self._subscriptions.begin(self._client.subscribe_to(self._subscriptions.topics))

    def _on_subscribe(
        self, _client: Any, _data: Any, mid: int, reasons: Sequence[ReasonCode], _properties: Any
    ) -> None:
        self._subscriptions.answered(mid, reasons)

    def _on_message(self, _client: Any, _data: Any, message: mqtt.MQTTMessage) -> None:
        try:
            topic = message.topic
        except UnicodeDecodeError:
            topic = ""  # no broker may send it; it is counted as unrouted
        if topic and self._subscriptions.dispensable(topic):
            self._client.unsubscribe(topic)
        if message.qos == 0:
            self.messages_qos0 += 1
        payload = bytes(message.payload)
        arrival = time.time_ns() // 1000
        self._inbox.append(
            Message(topic, payload, message.qos, message.retain, message.dup, message.mid, arrival, self.epoch)
        )
        self._inbox_bytes += len(payload)

    def _on_publish(self, _client: Any, _data: Any, mid: int, reason: ReasonCode, _properties: Any) -> None:
        if reason.is_failure:
            self.publications_refused += 1
            name = reason.getName()
            if name not in self._refused_before:
                self._refused_before.add(name)
                log.error("the broker refused what we published", reason=name, do="check the broker's access rules")
        self.on_acknowledged(mid)

    def _on_disconnect(self, _client: Any, _data: Any, flags: Any, reason: ReasonCode, _properties: Any) -> None:
        sock = self._socket
        if self._closing or sock is None:
            return  # paho calls twice when the keepalive has run out
        told = flags.is_disconnect_packet_from_server
        if self.connected:
            steady = time.monotonic() - self._since >= STEADY_SECONDS
            self._drop(contested=taken_over(reason))
            if steady:
                self._said = ""
            self._say(loss_in_words(reason, told, self._attempts.contested, self._broker))
        else:
            self._drop()
            self._say(self._refusal or silence_in_words(sock.failure, reason, told, self._broker))
