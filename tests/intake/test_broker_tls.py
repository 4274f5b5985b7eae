"""The connection over TLS and websockets."""

import contextlib
import shutil
import socket
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest
from structlog.testing import capture_logs
from websockets.exceptions import ConnectionClosed
from websockets.sync.server import ServerConnection, serve

from broker import PATIENCE_SECONDS, Mosquitto, running
from certificates import Authority, locked
from intake.link import TOPICS, connection, drive, payloads, ready, reasons, take
from quietmill.intake.trouble import CredentialsError

pytestmark = pytest.mark.broker


@pytest.fixture(scope="module")
def authority(tmp_path_factory: pytest.TempPathFactory) -> Authority:
    return Authority(tmp_path_factory.mktemp("authority"))


@pytest.fixture(scope="module")
def stranger(tmp_path_factory: pytest.TempPathFactory) -> Authority:
    return Authority(tmp_path_factory.mktemp("stranger"))


@pytest.fixture(autouse=True)
def no_long_waits(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("quietmill.intake.attempts.FIRST_DELAY_SECONDS", 0.1)


def encrypted(authority: Authority, *lines: str, days: int = 2, host: str = "localhost") -> list[str]:
    """Return the lines of a broker's settings."""
    certificate, key = authority.issue("server", "serverAuth", days, host)
    return [f"cafile {authority.certificate}", f"certfile {certificate}", f"keyfile {key}", *lines]


def url_of(broker: Mosquitto, scheme: str = "mqtts") -> str:
    return f"{scheme}://localhost:{broker.port}"


def troubles(url: str, **settings: object) -> str:
    """Return the reasons that are logged until a few attempts have failed."""
    with capture_logs() as logs, connection(url, **settings) as link:
        drive(link, lambda: link._attempts.failures >= 3, "three attempts")
        assert not link.connected
    return reasons(logs)


@pytest.mark.parametrize("version", ["5", "3.1.1"])
def test_an_encrypted_connection_with_the_plants_own_authority(
    tmp_path: Path, authority: Authority, version: str
) -> None:
    with (
        running(tmp_path, *encrypted(authority)) as broker,
        connection(url_of(broker), ca_file=authority.certificate, version=version) as link,
    ):
        drive(link, lambda: ready(link))
        link.publish(TOPICS[0], b"x" * 100_000, False, None)
        assert take(link, 1)[0].payload == b"x" * 100_000


def test_a_full_batch_leaves_nothing_behind_in_the_decrypted_stream(
    tmp_path: Path, authority: Authority, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Catches a wait on the socket alone: what TLS has decrypted already does not show there."""
    monkeypatch.setattr("quietmill.intake.broker.BATCH_MESSAGES", 3)
    lines = encrypted(authority, "max_inflight_messages 100")
    with running(tmp_path, *lines) as broker, connection(url_of(broker), ca_file=authority.certificate) as link:
        drive(link, lambda: ready(link))
        for place in range(30):
            link.publish(TOPICS[0], str(place).encode(), False, None)
        taken, begin = take(link, 1), time.monotonic()
        while len(taken) < 30:
            taken += link.take(PATIENCE_SECONDS)
        assert time.monotonic() - begin < PATIENCE_SECONDS
        assert payloads(taken) == [str(place) for place in range(30)]


def test_a_certificate_of_somebody_else_is_said_so(tmp_path: Path, authority: Authority, stranger: Authority) -> None:
    with running(tmp_path, *encrypted(authority)) as broker:
        said = troubles(url_of(broker), ca_file=stranger.certificate)
    assert said.count("is not trusted") == 1
    assert "check broker.ca_file" in said


def test_an_expired_certificate_is_said_so(tmp_path: Path, authority: Authority) -> None:
    with running(tmp_path, *encrypted(authority, days=0)) as broker:
        assert "certificate has expired" in troubles(url_of(broker), ca_file=authority.certificate)


def test_a_certificate_for_another_host_is_said_so(tmp_path: Path, authority: Authority) -> None:
    with running(tmp_path, *encrypted(authority, host="elsewhere.example")) as broker:
        assert "Hostname mismatch" in troubles(url_of(broker), ca_file=authority.certificate)


def test_a_client_certificate_is_shown_where_the_broker_wants_one(tmp_path: Path, authority: Authority) -> None:
    certificate, key = authority.issue("press", "clientAuth")
    with running(tmp_path, *encrypted(authority, "require_certificate true")) as broker:
        files = {"ca_file": authority.certificate, "certificate_file": certificate, "key_file": key}
        with connection(url_of(broker), **files) as link:
            drive(link, lambda: ready(link))


@pytest.mark.parametrize("version", ["tlsv1.2", "tlsv1.3"])
def test_a_missing_client_certificate_is_said_so(tmp_path: Path, authority: Authority, version: str) -> None:
    """With TLS 1.3 the refusal comes after the handshake, when the service believes itself connected."""
    lines = encrypted(authority, "require_certificate true", f"tls_version {version}")
    with running(tmp_path, *lines) as broker:
        said = troubles(url_of(broker), ca_file=authority.certificate)
    assert "certificate" in said
    assert said.count("|") <= 1


def test_a_certificate_that_the_broker_does_not_know_is_said_so(
    tmp_path: Path, authority: Authority, stranger: Authority
) -> None:
    certificate, key = stranger.issue("press", "clientAuth")
    files = {"ca_file": authority.certificate, "certificate_file": certificate, "key_file": key}
    with running(tmp_path, *encrypted(authority, "require_certificate true")) as broker:
        assert "certificate" in troubles(url_of(broker), **files)


def test_a_renewed_certificate_is_used_without_a_restart(
    tmp_path: Path, authority: Authority, stranger: Authority
) -> None:
    mine = [tmp_path / "mine.crt", tmp_path / "mine.key"]
    for source, copy in zip(stranger.issue("old", "clientAuth"), mine, strict=True):
        shutil.copy(source, copy)
    files = {"ca_file": authority.certificate, "certificate_file": mine[0], "key_file": mine[1]}
    lines = encrypted(authority, "require_certificate true")
    with running(tmp_path / "b", *lines) as broker, connection(url_of(broker), **files) as link:
        drive(link, lambda: link._attempts.failures >= 1, "the old one to be refused")
        for source, copy in zip(authority.issue("new", "clientAuth"), mine, strict=True):
            shutil.copy(source, copy)
        drive(link, lambda: ready(link))


def test_certificates_that_cannot_be_used_are_refused_at_the_start(tmp_path: Path, authority: Authority) -> None:
    certificate, key = authority.issue("one", "clientAuth")
    _, other = authority.issue("other", "clientAuth")
    empty = tmp_path / "empty.crt"
    empty.touch()
    for files, words in [
        ({"certificate_file": certificate, "key_file": other}, "key values mismatch"),
        ({"certificate_file": certificate, "key_file": locked(key)}, f"key_file {locked(key)} cannot be used"),
        ({"certificate_file": tmp_path / "none.crt", "key_file": key}, "No such file"),
        ({"ca_file": empty}, f"ca_file {empty} cannot be used: no certificate or crl found"),
    ]:
        with pytest.raises(CredentialsError, match=words):
            connection("mqtts://localhost", **{"ca_file": authority.certificate, **files}).__enter__()


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


def test_a_web_server_that_is_no_broker_is_said_so(tmp_path: Path) -> None:
    with serve(lambda _peer: None, "127.0.0.1", 0, subprotocols=["else"]) as server:
        thread = threading.Thread(target=server.serve_forever)
        thread.start()
        said = troubles(f"ws://127.0.0.1:{server.socket.getsockname()[1]}/mqtt")
        server.shutdown()
        thread.join()
    assert "check the port and path of broker.url" in said or "closed the connection before it answered" in said


def test_a_plain_connection_to_an_encrypted_port_is_given_up_with_a_reason(
    tmp_path: Path, authority: Authority
) -> None:
    with running(tmp_path, *encrypted(authority)) as broker:
        assert "check scheme and port of broker.url" in troubles(url_of(broker, "mqtt"))


def test_an_encrypted_connection_to_a_plain_port_is_given_up_with_a_reason(
    tmp_path: Path, authority: Authority
) -> None:
    with running(tmp_path) as broker:
        assert "port of broker.url" in troubles(url_of(broker), ca_file=authority.certificate)
