"""The connection over TLS and websockets."""

import contextlib
import socket
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest
from structlog.testing import capture_logs
from websockets.exceptions import ConnectionClosed
from websockets.sync.server import ServerConnection, serve

from broker import Peer, running
from certificates import Authority
from intake.test_broker import TOPICS, connection, drive, ready, reasons, take

pytestmark = pytest.mark.broker


@pytest.fixture(scope="module")
def authority(tmp_path_factory: pytest.TempPathFactory) -> Authority:
    return Authority(tmp_path_factory.mktemp("authority"))


def encrypted(authority: Authority, *lines: str) -> list[str]:
    certificate, key = authority.issue("server", "serverAuth")
    return [f"cafile {authority.certificate}", f"certfile {certificate}", f"keyfile {key}", *lines]


def test_an_encrypted_connection_with_the_plants_own_authority(tmp_path: Path, authority: Authority) -> None:
    with running(tmp_path, *encrypted(authority)) as broker:
        url = f"mqtts://localhost:{broker.port}"
        with connection(url, ca_file=authority.certificate) as link:
            drive(link, lambda: ready(link))
            link.publish(TOPICS[0], b"x" * 100_000, False, None)
            assert take(link, 1)[0].payload == b"x" * 100_000


def test_a_certificate_of_somebody_else_is_said_so(tmp_path: Path, authority: Authority) -> None:
    stranger = Authority(tmp_path / "stranger")
    with running(tmp_path / "b", *encrypted(authority)) as broker:
        url = f"mqtts://localhost:{broker.port}"
        with capture_logs() as logs, connection(url, ca_file=stranger.certificate) as link:
            drive(link, lambda: logs, "the log line")
    assert "is not trusted" in reasons(logs)
    assert "check broker.ca_file" in reasons(logs)


def test_a_client_certificate_is_shown_where_the_broker_wants_one(tmp_path: Path, authority: Authority) -> None:
    certificate, key = authority.issue("press", "clientAuth")
    with running(tmp_path, *encrypted(authority, "require_certificate true")) as broker:
        url = f"mqtts://localhost:{broker.port}"
        files = {"ca_file": authority.certificate, "certificate_file": certificate, "key_file": key}
        with connection(url, **files) as link:
            drive(link, lambda: ready(link))
        with capture_logs() as logs, connection(url, ca_file=authority.certificate) as link:
            drive(link, lambda: logs, "the log line")
    assert any(word in reasons(logs) for word in ("certificate", "closed the connection"))


def test_certificates_that_do_not_fit_together_are_refused_at_the_start(tmp_path: Path, authority: Authority) -> None:
    certificate, _ = authority.issue("one", "clientAuth")
    _, key = authority.issue("other", "clientAuth")
    files = {"ca_file": authority.certificate, "certificate_file": certificate, "key_file": key}
    with (
        pytest.raises(ValueError, match="certificates under broker cannot be used"),
        connection("mqtts://localhost", **files),
    ):
        pass


@contextlib.contextmanager
def websocket_in_front_of(port: int) -> Iterator[int]:
    """Serve websockets before a broker's port, as a proxy in a plant does; yield the port."""

    def bridge(peer: ServerConnection) -> None:
        with socket.create_connection(("127.0.0.1", port)) as far:

            def back() -> None:
                with contextlib.suppress(OSError, ConnectionClosed):
                    while data := far.recv(65536):
                        peer.send(data)

            thread = threading.Thread(target=back)
            thread.start()
            with contextlib.suppress(OSError, ConnectionClosed):
                for message in peer:
                    far.sendall(message)
            far.shutdown(socket.SHUT_RDWR)
            thread.join()

    with serve(bridge, "127.0.0.1", 0, subprotocols=["mqtt"]) as server:
        thread = threading.Thread(target=server.serve_forever)
        thread.start()
        yield server.socket.getsockname()[1]
        server.shutdown()
        thread.join()


def test_websockets(tmp_path: Path) -> None:
    with (
        running(tmp_path) as broker,
        websocket_in_front_of(broker.port) as port,
        connection(f"ws://127.0.0.1:{port}/mqtt") as link,
    ):
        drive(link, lambda: ready(link))
        link.publish(TOPICS[0], b"over http" * 10_000, False, None)
        assert take(link, 1)[0].payload == b"over http" * 10_000


def test_a_plain_connection_to_an_encrypted_port_is_given_up_with_a_reason(
    tmp_path: Path, authority: Authority
) -> None:
    plain = "mqtt://127.0.0.1:{port}"
    with running(tmp_path, *encrypted(authority)) as broker, capture_logs() as logs:
        with connection(plain.format(port=broker.port)) as link:
            drive(link, lambda: logs, "the log line")
        assert not link.connected


def test_an_encrypted_connection_to_a_plain_port_is_given_up_with_a_reason(
    tmp_path: Path, authority: Authority
) -> None:
    with running(tmp_path) as broker, Peer(broker.port):
        url = f"mqtts://127.0.0.1:{broker.port}"
        with capture_logs() as logs, connection(url, ca_file=authority.certificate) as link:
            drive(link, lambda: logs, "the log line")
    assert "no encrypted connection" in reasons(logs)
