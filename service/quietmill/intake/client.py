"""paho's client, set up from the settings: protocol, session, will, passwords, certificates and subscriptions."""

import socket
import ssl
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any, Final, NamedTuple

from paho.mqtt import client as mqtt
from paho.mqtt.client import _WebsocketWrapper
from paho.mqtt.enums import CallbackAPIVersion
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties
from paho.mqtt.subscribeoptions import SubscribeOptions

from quietmill.intake.attempts import ANSWER_SECONDS
from quietmill.intake.trouble import CredentialsError, words_of
from quietmill.intake.wire import BufferedSocket, RawSocket
from quietmill.settings import Broker

__all__ = ["Client", "Will"]

MAX_PACKET_BYTES: Final = 16 * 1024 * 1024
"""A v5 broker keeps larger packets to itself; a smaller one whose payload is too large is refused and counted."""
RECEIVE_MAXIMUM: Final = 10_000
"""A v5 broker sends no more messages ahead of our acknowledgements, which bounds what a full outbox holds back."""
TOPICS_A_PACKET: Final = 200


class Will(NamedTuple):
    """What the broker publishes, retained, when the service is gone without a word."""

    topic: str
    payload: bytes


class Client(mqtt.Client):
    """paho's client on a socket that was made beforehand, with a session that the broker keeps.

    Raises `CredentialsError` where password or certificates cannot be used.
    """

    def __init__(self, broker: Broker, will: Will) -> None:
        self._settings = broker
        self._modern = broker.version == "5"
        super().__init__(
            CallbackAPIVersion.VERSION2,
            client_id=broker.client_id,
            clean_session=None if self._modern else False,
            protocol=mqtt.MQTTv5 if self._modern else mqtt.MQTTv311,
            transport="websockets" if broker.scheme in {"ws", "wss"} else "tcp",
            reconnect_on_failure=False,
            manual_ack=True,
        )
        self.ready: BufferedSocket | None = None
        self.read_password()
        self.make_context()
        self.will_set(will.topic, will.payload, qos=1, retain=True)
        # with this callback set, paho queues packets for loop_write instead of sending each at once
        self.on_socket_register_write = lambda *_: None
        if self._modern:
            properties = Properties(PacketTypes.CONNECT)
            properties.SessionExpiryInterval = broker.session_expiry_seconds
            properties.MaximumPacketSize = MAX_PACKET_BYTES
            properties.ReceiveMaximum = RECEIVE_MAXIMUM
            self.connect_async(
                broker.host, broker.port, broker.keepalive_seconds, clean_start=False, properties=properties
            )
        else:
            self.connect_async(broker.host, broker.port, broker.keepalive_seconds)

    def read_password(self) -> None:
        """Read the password, which may have been changed. Raises `CredentialsError`."""
        if self._settings.user is not None:
            self.username_pw_set(self._settings.user, password_in(self._settings.password_file))

    def make_context(self) -> ssl.SSLContext | None:
        """Read the certificates, which may have been renewed; None without TLS. Raises `CredentialsError`."""
        broker = self._settings
        if broker.scheme not in {"mqtts", "wss"}:
            return None
        if broker.ca_file is None:
            context = ssl.create_default_context()
        else:
            context = ssl.SSLContext(ssl.PROTOCOL_TLS_CLIENT)
            try:
                context.load_verify_locations(broker.ca_file)
            except OSError as error:
                raise CredentialsError(f"broker.ca_file {broker.ca_file} cannot be used: {words_of(error)}") from None
        if broker.certificate_file is not None and broker.key_file is not None:
            try:
                # an encrypted key must not ask a terminal for its pass phrase
                context.load_cert_chain(broker.certificate_file, broker.key_file, password="")
            except OSError as error:
                raise CredentialsError(
                    f"broker.certificate_file {broker.certificate_file} with broker.key_file {broker.key_file} "
                    f"cannot be used: {words_of(error)}"
                ) from None
        return context

    def make_socket(self) -> RawSocket:
        """Connect, which blocks: TCP, and TLS and websocket where the settings say so. Raises what prevents it."""
        self.read_password()
        context, broker = self.make_context(), self._settings
        sock = socket.create_connection((broker.host, broker.port), ANSWER_SECONDS)
        try:
            if context is not None:
                sock = context.wrap_socket(sock, server_hostname=broker.host)
            if self.transport == "websockets":
                return _WebsocketWrapper(sock, broker.host, broker.port, context is not None, broker.path, None)
        except BaseException:
            sock.close()
            raise
        return sock

    def _create_socket(self) -> Any:
        """Hand paho the socket that is ready."""
        ready, self.ready = self.ready, None
        if ready is None:
            raise OSError("no connection has been made")
        return ready

    def subscribe_to(self, topics: Sequence[str]) -> Iterator[tuple[int, Sequence[str]]]:
        """Subscribe with QoS 1, in packets of bounded size; yield the number of each and its topics."""
        for begin in range(0, len(topics), TOPICS_A_PACKET):
            some = topics[begin : begin + TOPICS_A_PACKET]
            if self._modern:
                # retained messages only for a subscription that the session does not hold yet
                options = SubscribeOptions(qos=1, retainHandling=SubscribeOptions.RETAIN_SEND_IF_NEW_SUB)
                _, number = self.subscribe([(topic, options) for topic in some])
            else:
                _, number = self.subscribe([(topic, 1) for topic in some])
            if number is not None:
                yield number, some

    def unsubscribe_from(self, topics: Sequence[str]) -> None:
        """Unsubscribe, in packets of bounded size."""
        for begin in range(0, len(topics), TOPICS_A_PACKET):
            self.unsubscribe(list(topics[begin : begin + TOPICS_A_PACKET]))

    def say(self, topic: str, payload: bytes, retain: bool, content_type: str | None) -> int:
        """Publish with QoS 1; return the number by which the broker will acknowledge it."""
        properties = None
        if content_type is not None and self._modern:
            properties = Properties(PacketTypes.PUBLISH)
            properties.ContentType = content_type
        return self.publish(topic, payload, 1, retain, properties).mid


def password_in(file: Path | None) -> str | None:
    """Return the password that a file holds, without the end of its line. Raises `CredentialsError`."""
    if file is None:
        return None
    try:
        return file.read_text(encoding="utf-8").rstrip("\r\n")
    except UnicodeDecodeError:
        raise CredentialsError(f"broker.password_file {file} is not UTF-8 text") from None
    except OSError as error:
        raise CredentialsError(f"broker.password_file {file} cannot be read: {words_of(error)}") from None
