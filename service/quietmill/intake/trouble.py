"""What keeps the service from its broker, in plain words, with what to do."""

import socket
import ssl
from typing import Final

from paho.mqtt.reasoncodes import ReasonCode

from quietmill.settings import Broker

__all__ = ["in_words", "refusal_in_words"]

REFUSALS: Final = {
    "Bad user name or password": "the broker refuses user or password: check broker.user and broker.password_file",
    "Not authorized": "the broker does not let this user in: check broker.user, broker.password_file, its access rules",
    "Client identifier not valid": "the broker refuses the client id: choose another broker.client_id",
    "Unsupported protocol version": "the broker does not speak this MQTT version: try broker.version 3.1.1",
    "Server unavailable": "the broker is not available at the moment",
    "Server busy": "the broker is busy",
    "Banned": "the broker has banned this client: ask who runs it",
    "Quota exceeded": "the broker's quota for this client is used up",
}


def in_words(error: BaseException, broker: Broker, seconds: float) -> str:
    """Say why no connection came about. `seconds` is how long was waited for one."""
    host, where = broker.host, f"{broker.host}:{broker.port}"
    match error:
        case ConnectionRefusedError():
            return f"nothing listens at {where} (connection refused): is the broker running, is the port right?"
        case socket.gaierror():
            return f"the name {host} is not known: check broker.url and the name service"
        case ssl.SSLCertVerificationError():
            reason = error.verify_message or "certificate verify failed"
            return f"the certificate of {where} is not trusted ({reason}): check broker.ca_file and the host name"
        case ssl.SSLError():
            reason = error.reason or str(error)
            return f"no encrypted connection to {where} ({reason}): check the port, and the certificates on both sides"
        case ConnectionError() if broker.scheme in {"mqtts", "wss"}:
            return f"no encrypted connection to {where} (it closes at once): does that port speak TLS?"
        case TimeoutError():
            return f"{where} did not answer in {seconds:g} s: is there a firewall between, is it a broker?"
        case OSError():
            return f"{where} cannot be reached ({error.strerror or error})"
        case _:
            return f"{where} does not behave like a broker ({error})"


def refusal_in_words(reason: ReasonCode) -> str:
    """Say why the broker refused the session."""
    name = reason.getName()
    return REFUSALS.get(name, f"the broker refuses the connection ({name})")
