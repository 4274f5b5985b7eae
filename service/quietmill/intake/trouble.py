"""What keeps the service from its broker, in plain words, with what to do."""

import socket
import ssl
from typing import Final

from paho.mqtt.client import WebsocketConnectionError
from paho.mqtt.reasoncodes import ReasonCode

from quietmill.intake.attempts import ANSWER_SECONDS
from quietmill.settings import Broker

__all__ = [
    "CredentialsError",
    "in_words",
    "loss_in_words",
    "refusal_in_words",
    "silence_in_words",
    "taken_over",
    "words_of",
]

REFUSALS: Final = {
    "Bad user name or password": "the broker refuses user or password: check broker.user and broker.password_file",
    "Not authorized": "the broker does not let this user in: check broker.user, broker.password_file, its access rules",
    "Client identifier not valid": "the broker refuses the client id: choose another broker.client_id",
    "Unsupported protocol version": "the broker does not speak this MQTT version: set broker.version to the other one",
    "Server unavailable": "the broker is not available at the moment",
    "Server busy": "the broker is busy",
    "Banned": "the broker has banned this client: ask who runs it",
    "Quota exceeded": "the broker's quota for this client is used up",
}
HUNG_UP: Final = (
    "{where} closed the connection before it answered: check scheme and port of broker.url, broker.version, user, "
    "password and certificates"
)
TAKEN_OVER: Final = "Session taken over"
KEEPALIVE_TIMEOUT: Final = "Keep alive timeout"
PROTOCOL_ERROR: Final = "Protocol error"
ALERTS: Final = {
    "CERTIFICATE_REQUIRED": "the broker demands a client certificate: set certificate_file and key_file",
    "HANDSHAKE_FAILURE": "the broker may demand a client certificate: check certificate_file and key_file",
    "UNKNOWN_CA": "the broker does not know who signed our certificate: check broker.certificate_file",
    "CERTIFICATE_EXPIRED": "our certificate has expired: renew broker.certificate_file",
    "BAD_CERTIFICATE": "the broker does not accept our certificate: check broker.certificate_file",
    "WRONG_VERSION_NUMBER": "what listens there speaks no TLS: check the port and scheme of broker.url",
    "UNEXPECTED_EOF": "what listens there ended the handshake: does it speak TLS? check the port of broker.url",
}
"""What the name of an OpenSSL error ends in or holds, and what it means for us."""


class CredentialsError(ValueError):
    """A password or certificate file cannot be used; its operator can mend that."""


def in_words(error: BaseException, broker: Broker) -> str:
    """Say why no connection came about, or why one ended."""
    where = f"{broker.host}:{broker.port}"
    match error:
        case CredentialsError():
            return str(error)
        case ConnectionRefusedError():
            return f"nothing listens at {where} (connection refused): is the broker running, is the port right?"
        case socket.gaierror() | UnicodeError():
            return f"the name {broker.host} is not known: check broker.url and the name service"
        case ssl.SSLCertVerificationError():
            reason = error.verify_message or "certificate verify failed"
            return f"the certificate of {where} is not trusted ({reason}): check broker.ca_file and the host name"
        case ssl.SSLError():
            for name, meaning in ALERTS.items():
                if name in (error.reason or str(error)):
                    return f"no encrypted connection to {where}: {meaning}"
            return f"no encrypted connection to {where} ({words_of(error)}): check the port and both certificates"
        case WebsocketConnectionError():
            return f"{where} speaks no MQTT over websockets there: check the port and path of broker.url"
        case ConnectionError():
            return HUNG_UP.format(where=where)
        case TimeoutError():
            return f"{where} did not answer in {ANSWER_SECONDS:g} s: is there a firewall between, is it a broker?"
        case OSError():
            return f"{where} cannot be reached ({words_of(error)})"
        case _:
            return f"{where} does not behave like a broker ({error})"


def refusal_in_words(reason: ReasonCode) -> str:
    """Say why the broker refused the session."""
    name = reason.getName()
    return REFUSALS.get(name, f"the broker refuses the connection ({name})")


def silence_in_words(failure: OSError | None, reason: ReasonCode, told: bool, broker: Broker) -> str:
    """Say why a connection ended before the broker had accepted it; `failure` is what its socket broke with."""
    if isinstance(failure, ssl.SSLError):
        return in_words(failure, broker)
    if told or reason.getName() in {PROTOCOL_ERROR, KEEPALIVE_TIMEOUT}:
        return loss_in_words(reason, told, False, broker)
    return HUNG_UP.format(where=f"{broker.host}:{broker.port}")


def loss_in_words(reason: ReasonCode, told: bool, contested: bool, broker: Broker) -> str:
    """Say why a connection ended.

    `told` where the broker gave the reason itself, `contested` where several connections were lost so soon.
    """
    name, remedy = reason.getName(), "give each service a broker.client_id of its own"
    if taken_over(reason):
        return f"another client has connected as {broker.client_id!r}: {remedy}"
    if contested:
        return (
            "the broker drops each connection soon after accepting it: "
            f"another client may use the id {broker.client_id!r}; {remedy}"
        )
    if told:
        return f"the broker closed the connection ({name})"
    if name == KEEPALIVE_TIMEOUT:
        return f"the broker has not answered for {broker.keepalive_seconds} s (broker.keepalive)"
    if name == PROTOCOL_ERROR:
        return "the broker sent what is not MQTT: check broker.url and broker.version"
    return "the connection was lost"


def taken_over(reason: ReasonCode) -> bool:
    """Whether the broker said that another client took the session."""
    return reason.getName() == TAKEN_OVER


def words_of(error: OSError) -> str:
    """Return the reason that an error carries, as words."""
    if isinstance(error, ssl.SSLError):
        return (error.reason or error.strerror or str(error)).replace("_", " ").lower()
    return error.strerror or str(error)
