"""The connection to the broker: one persistent session, driven by the loop, renewed for ever.

The loop calls `take`, which waits for the socket, drives paho and returns what came. Connecting (name service, TCP,
TLS, websocket) is the only thing that can block, so it happens in a short-lived thread that hands over a ready socket.
"""

import contextlib
import random
import selectors
import socket
import ssl
import threading
import time
from collections.abc import Callable, Sequence
from queue import Empty, SimpleQueue
from typing import Any, Final, NamedTuple

import structlog
from paho.mqtt import client as mqtt
from paho.mqtt.enums import CallbackAPIVersion
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode
from paho.mqtt.subscribeoptions import SubscribeOptions

from quietmill.intake.message import Message
from quietmill.intake.trouble import in_words, refusal_in_words
from quietmill.intake.wire import BufferedSocket, RawSocket
from quietmill.settings import Broker

__all__ = ["Connection", "Will"]

log = structlog.get_logger("quietmill.broker")

BATCH_MESSAGES: Final = 4096
BATCH_BYTES: Final = 16 * 1024 * 1024
MAX_PACKET_BYTES: Final = 16 * 1024 * 1024
"""A v5 broker keeps larger packets to itself; a smaller one whose payload is too large is refused and counted."""
ANSWER_SECONDS: Final = 10.0
"""How long to wait for a connection, and for the broker's answer on it."""
FIRST_DELAY_SECONDS: Final = 1.0
LONGEST_DELAY_SECONDS: Final = 60.0
STEADY_SECONDS: Final = 20.0
"""A connection that lasted so long was a good one; the next attempt begins with the first delay again."""
SHORT_LIVES: Final = 3
"""So many connections in a row that the broker accepted and lost within STEADY_SECONDS look like a stolen client id."""
TOPICS_A_PACKET: Final = 200
WINDOW: Final = 20
"""Messages published and not yet acknowledged, unless the broker allows fewer."""
SESSION_TAKEN_OVER: Final = 142


class Will(NamedTuple):
    """What the broker publishes, retained, when the service is gone without a word."""

    topic: str
    payload: bytes


class Client(mqtt.Client):
    """paho's client on a socket that was made beforehand."""

    def __init__(self, broker: Broker) -> None:
        modern = broker.version == "5"
        super().__init__(
            CallbackAPIVersion.VERSION2,
            client_id=broker.client_id,
            clean_session=None if modern else False,
            protocol=mqtt.MQTTv5 if modern else mqtt.MQTTv311,
            transport="websockets" if broker.scheme in {"ws", "wss"} else "tcp",
            reconnect_on_failure=False,
            manual_ack=True,
        )
        self.connect_timeout = ANSWER_SECONDS
        self.ready: BufferedSocket | None = None

    def make_socket(self) -> RawSocket:
        """Connect, which blocks: TCP, and TLS and websocket where the settings say so."""
        return super()._create_socket()

    def _ssl_wrap_socket(self, tcp_sock: socket.socket) -> ssl.SSLSocket:
        """Encrypt a connection, or close it."""
        context = self._ssl_context or ssl.create_default_context()
        encrypted = context.wrap_socket(tcp_sock, server_hostname=self._host, do_handshake_on_connect=False)
        try:
            encrypted.settimeout(self.connect_timeout)
            encrypted.do_handshake()
        except BaseException:
            encrypted.close()
            raise
        return encrypted

    def _create_socket(self) -> Any:
        """Hand paho the socket that is ready."""
        ready, self.ready = self.ready, None
        if ready is None:
            raise OSError("no connection has been made")
        return ready


class Connection:
    """The service's session at its broker.

    `topics` are subscribed to with QoS 1. `take` is called again and again by one thread; `wake` may be called by any.
    Raises `ValueError` where certificates cannot be used.
    """

    def __init__(self, broker: Broker, topics: Sequence[str], will: Will) -> None:
        self._broker = broker
        self._topics = tuple(topics)
        self.epoch = 0
        """Counts connections; a message is acknowledged only on its own."""
        self.connected = False
        self.sessions_lost = 0
        """Counts connections to a broker that knew no session: what it had retained or queued for us may be gone."""
        self.messages_qos0 = 0
        self.window = WINDOW
        self.on_acknowledged: Callable[[int], None] = lambda _mid: None
        """Called with the mid of each published message that the broker has acknowledged."""
        self._trouble = "connecting for the first time"
        self._refused: list[str] = []
        self._asked: dict[int, Sequence[str]] = {}
        self._inbox: list[Message] = []
        self._inbox_bytes = 0
        self._socket: BufferedSocket | None = None
        self._interest = 0
        self._made: SimpleQueue[tuple[int, RawSocket | BaseException]] = SimpleQueue()
        self._attempt = 0
        self._attempting = False
        self._deadline = 0.0
        self._next_attempt = 0.0
        self._delay = FIRST_DELAY_SECONDS
        self._since = 0.0
        self._short_lives = 0
        self._closing = False
        self._client = self._make_client(will)
        self._selector = selectors.DefaultSelector()
        self._wakes, self._waker = socket.socketpair()
        self._wakes.setblocking(False)
        self._waker.setblocking(False)
        self._selector.register(self._wakes, selectors.EVENT_READ)

    def _make_client(self, will: Will) -> Client:
        broker, client = self._broker, Client(self._broker)
        if broker.scheme in {"mqtts", "wss"}:
            try:
                context = ssl.create_default_context(cafile=str(broker.ca_file) if broker.ca_file else None)
                if broker.certificate_file and broker.key_file:
                    context.load_cert_chain(broker.certificate_file, broker.key_file)
            except (OSError, ssl.SSLError) as error:
                raise ValueError(f"the certificates under broker cannot be used: {error}") from None
            client.tls_set_context(context)
        if client.transport == "websockets":
            client.ws_set_options(path=broker.path)
        client.will_set(will.topic, will.payload, qos=1, retain=True)
        client.on_connect = self._on_connect
        client.on_disconnect = self._on_disconnect
        client.on_message = self._on_message
        client.on_publish = self._on_publish
        client.on_subscribe = self._on_subscribe
        # with this callback set, paho queues packets for loop_write instead of sending each at once
        client.on_socket_register_write = lambda *_: None
        if broker.version == "5":
            properties = Properties(PacketTypes.CONNECT)
            properties.SessionExpiryInterval = broker.session_expiry_seconds
            properties.MaximumPacketSize = MAX_PACKET_BYTES
            client.connect_async(
                broker.host, broker.port, broker.keepalive_seconds, clean_start=False, properties=properties
            )
        else:
            client.connect_async(broker.host, broker.port, broker.keepalive_seconds)
        return client

    # what the rest of the service sees

    @property
    def trouble(self) -> str:
        """Why readings may not be coming in, in plain words; empty when all is well."""
        if not self.connected:
            return f"no connection to the broker: {self._trouble}"
        if self._refused:
            shown = ", ".join(self._refused[:3])
            return f"the broker refused {len(self._refused)} subscriptions, among them {shown}"
        return "the broker has not yet granted the subscriptions" if self._asked else ""

    def wake(self) -> None:
        """End the wait of `take` from another thread or a signal handler."""
        with contextlib.suppress(OSError):  # full of wakes already, or closed
            self._waker.send(b"w")

    @property
    def waker(self) -> int:
        """A file descriptor that wakes `take` when a byte is written to it, for `signal.set_wakeup_fd`."""
        return self._waker.fileno()

    def take(self, timeout_seconds: float) -> list[Message]:
        """Wait for at most so long, then return what came: until the socket ran dry or the batch is full.

        Never waits for more once something is there, and never for a connection.
        """
        self._turn_towards_broker()
        if self._socket is not None and self._socket.pending():
            timeout_seconds = 0.0
        for key, _ in self._selector.select(timeout_seconds):
            if key.fileobj is self._wakes:
                with contextlib.suppress(BlockingIOError):
                    while self._wakes.recv(4096):
                        pass
        self._turn_towards_broker()
        self._read()
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
        properties = None
        if content_type is not None and self._broker.version == "5":
            properties = Properties(PacketTypes.PUBLISH)
            properties.ContentType = content_type
        return self._client.publish(topic, payload, 1, retain, properties).mid

    def send(self) -> None:
        """Send what waits to be sent."""
        sock = self._socket
        if sock is None:
            return
        if self._client.want_write():
            self._client.loop_write()
        sock.flush()
        self._watch(sock)

    def close(self) -> None:
        """Disconnect; the broker keeps the session."""
        self._closing = True
        if self._socket is not None:
            self._client.disconnect()
            self.send()
            self._drop()
        self._selector.close()
        self._wakes.close()
        self._waker.close()

    # connecting

    def _turn_towards_broker(self) -> None:
        """Begin, finish or give up an attempt to connect."""
        now = time.monotonic()
        with contextlib.suppress(Empty):
            while True:
                self._take_over(*self._made.get_nowait(), now)
        if self._attempting and now > self._deadline:
            self._failed(TimeoutError())
        if self._socket is None and not self._attempting and not self._closing and now >= self._next_attempt:
            self._attempt += 1
            self._attempting = True
            self._deadline = now + 2 * ANSWER_SECONDS
            threading.Thread(target=self._connect, args=(self._attempt,), name="connect", daemon=True).start()

    def _connect(self, attempt: int) -> None:
        """Make a connection, in a thread of its own."""
        try:
            if self._broker.user is not None:
                password = None
                if self._broker.password_file is not None:
                    password = self._broker.password_file.read_text().rstrip("\r\n")
                self._client.username_pw_set(self._broker.user, password)
            made: RawSocket | BaseException = self._client.make_socket()
        except Exception as error:  # noqa: BLE001  whatever it is, the loop must learn of it
            made = error
        self._made.put((attempt, made))
        self.wake()

    def _take_over(self, attempt: int, made: RawSocket | BaseException, now: float) -> None:
        """Take the socket that an attempt made, and introduce ourselves to the broker."""
        if attempt != self._attempt or not self._attempting or self._closing:
            if not isinstance(made, BaseException):
                made.close()
        elif isinstance(made, BaseException):
            self._failed(made)
        else:
            self._deadline = now + ANSWER_SECONDS
            self._socket = self._client.ready = BufferedSocket(made)
            self.epoch += 1
            try:
                self._client.reconnect()
            except (OSError, ValueError) as error:
                self._failed(error)
            else:
                self.send()

    def _failed(self, error: BaseException) -> None:
        broker = self._broker
        self._say(in_words(error, broker, ANSWER_SECONDS))
        self._drop()

    def _say(self, trouble: str) -> None:
        """Log a trouble once, however often it repeats."""
        if trouble != self._trouble:
            self._trouble = trouble
            log.warning("no connection to the broker", reason=trouble, url=self._broker.url)

    def _drop(self) -> None:
        """Let go of the socket, and set the time of the next attempt."""
        if self._socket is not None:
            with contextlib.suppress(KeyError, ValueError):
                self._selector.unregister(self._socket)
            self._socket.close()
        self._socket = None
        self._interest = 0
        self.connected = False
        self._attempting = False
        self._asked.clear()
        self._next_attempt = time.monotonic() + self._delay * random.uniform(0.5, 1.0)  # noqa: S311  jitter is no secret
        self._delay = min(2 * self._delay, LONGEST_DELAY_SECONDS)

    def _watch(self, sock: BufferedSocket) -> None:
        """Tell the selector what to wait for."""
        interest = selectors.EVENT_READ | (selectors.EVENT_WRITE if sock.unsent else 0)
        if self._socket is not sock or interest == self._interest:
            return
        if self._interest:
            self._selector.modify(sock, interest)
        else:
            self._selector.register(sock, interest)
        self._interest = interest

    def _read(self) -> None:
        """Read until the socket is dry or the batch is full."""
        sock = self._socket
        if sock is None:
            return
        sock.dry = False
        while not sock.dry and len(self._inbox) < BATCH_MESSAGES and self._inbox_bytes < BATCH_BYTES:
            if self._client.loop_read() != mqtt.MQTT_ERR_SUCCESS or self._socket is not sock:
                break

    # paho's callbacks: they append and note, and never raise

    def _on_connect(
        self, _client: Any, _data: Any, flags: mqtt.ConnectFlags, reason: ReasonCode, properties: Any
    ) -> None:
        if reason.is_failure:
            self._say(refusal_in_words(reason))
            return
        self._attempting = False
        self.connected = True
        self._since = time.monotonic()
        self.window = min(WINDOW, getattr(properties, "ReceiveMaximum", WINDOW))
        if not flags.session_present:
            self.sessions_lost += 1
            if self.epoch > 1 and self.sessions_lost > 1:
                log.warning("the broker has lost the session", meaning="readings sent meanwhile may be missing")
        log.info("connected to the broker", url=self._broker.url, session_present=flags.session_present)
        self._trouble = "the connection was lost"
        self._subscribe()

    def _subscribe(self) -> None:
        self._refused = []
        for begin in range(0, len(self._topics), TOPICS_A_PACKET):
            topics = self._topics[begin : begin + TOPICS_A_PACKET]
            if self._broker.version == "5":
                # retained messages only for a subscription that the session does not hold yet
                options = SubscribeOptions(qos=1, retainHandling=SubscribeOptions.RETAIN_SEND_IF_NEW_SUB)
                asked: list[Any] = [(topic, options) for topic in topics]
            else:
                asked = [(topic, 1) for topic in topics]
            _, mid = self._client.subscribe(asked)
            if mid is not None:
                self._asked[mid] = topics

    def _on_subscribe(
        self, _client: Any, _data: Any, mid: int, reasons: Sequence[ReasonCode], _properties: Any
    ) -> None:
        topics = self._asked.pop(mid, ())
        for topic, reason in zip(topics, reasons, strict=False):
            if reason.is_failure:
                self._refused.append(topic)
                log.error(
                    "the broker refused a subscription",
                    topic=topic,
                    reason=reason.getName(),
                    do="check its access rules",
                )

    def _on_message(self, _client: Any, _data: Any, message: mqtt.MQTTMessage) -> None:
        try:
            topic = message.topic
        except UnicodeDecodeError:
            topic = ""  # no broker may send it; it is counted as unrouted
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
            log.error("the broker refused a message", reason=reason.getName(), do="check its access rules")
        self.on_acknowledged(mid)

    def _on_disconnect(self, _client: Any, _data: Any, flags: Any, reason: ReasonCode, _properties: Any) -> None:
        if self._closing or self._socket is None:
            return  # paho calls twice when the keepalive has run out
        if not self.connected:
            if self._trouble in {"connecting for the first time", "the connection was lost"}:
                self._say(f"the broker closed the connection before it answered ({reason.getName()})")
        else:
            lived = time.monotonic() - self._since
            if lived >= STEADY_SECONDS:
                self._delay, self._short_lives = FIRST_DELAY_SECONDS, 0
            else:
                self._short_lives += 1
            self._trouble = ""
            self._say(self._why_lost(reason, flags.is_disconnect_packet_from_server))
        self._drop()

    def _why_lost(self, reason: ReasonCode, told: bool) -> str:
        name = self._broker.client_id
        if reason.value == SESSION_TAKEN_OVER:
            return f"another client has connected as {name!r}: give each service a broker.client_id of its own"
        if self._short_lives >= SHORT_LIVES:
            return (
                f"the broker drops each connection soon after accepting it: another client may use the id {name!r}; "
                "give each service a broker.client_id of its own"
            )
        return f"the broker closed the connection ({reason.getName()})" if told else "the connection was lost"
