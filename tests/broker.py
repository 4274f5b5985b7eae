"""A real Mosquitto for tests, on a port of its own."""

import contextlib
import shutil
import socket
import subprocess
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Self

import paho.mqtt.client as mqtt
from paho.mqtt.enums import CallbackAPIVersion

MOSQUITTO = shutil.which("mosquitto") or "/usr/sbin/mosquitto"
PATIENCE_SECONDS = 30.0


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return probe.getsockname()[1]


def wait_for(condition, seconds: float = PATIENCE_SECONDS, what: str = "condition"):
    """Return the first true answer of a condition; fail when it stays false."""
    end = time.monotonic() + seconds
    while True:
        answer = condition()
        if answer:
            return answer
        assert time.monotonic() < end, f"waited {seconds} s in vain for {what}"
        time.sleep(0.01)


class Mosquitto:
    """A broker that a test starts, stops and kills; its sessions outlive a stop."""

    def __init__(self, folder: Path, *lines: str, port: int | None = None) -> None:
        self.port = port or free_port()
        self.folder = folder
        store = folder / "store"
        store.mkdir(parents=True, exist_ok=True)
        access = (
            ()
            if any("password_file" in line or "allow_anonymous" in line for line in lines)
            else ("allow_anonymous true",)
        )
        self.config = folder / "mosquitto.conf"
        self.config.write_text(
            "\n".join(
                [
                    "user root",
                    f"listener {self.port} 127.0.0.1",
                    *access,
                    "persistence true",
                    f"persistence_location {store}/",
                    "max_queued_messages 100000",
                    *lines,
                    "",
                ]
            )
        )
        self.process: subprocess.Popen[bytes] | None = None

    def start(self) -> "Mosquitto":
        log = (self.folder / "mosquitto.log").open("ab")
        self.process = subprocess.Popen([MOSQUITTO, "-c", str(self.config)], stdout=log, stderr=log)
        log.close()

        def listens() -> bool:
            assert self.process is not None
            assert self.process.poll() is None, (self.folder / "mosquitto.log").read_text()
            with contextlib.suppress(OSError), socket.create_connection(("127.0.0.1", self.port), 1):
                return True
            return False

        wait_for(listens, what="the broker to listen")
        return self

    def stop(self) -> None:
        """End in good order: sessions and queues are saved."""
        if self.process is not None:
            self.process.terminate()
            self.process.wait(10)
            self.process = None

    def kill(self) -> None:
        """End as if the machine had lost power."""
        if self.process is not None:
            self.process.kill()
            self.process.wait(10)
            self.process = None

    @property
    def url(self) -> str:
        return f"mqtt://127.0.0.1:{self.port}"


def password_file(folder: Path, user: str, password: str) -> Path:
    """Return a file of users for the broker's `password_file`."""
    file = folder / "users"
    subprocess.run(["mosquitto_passwd", "-b", "-c", str(file), user, password], check=True, capture_output=True)
    return file


@contextlib.contextmanager
def running(folder: Path, *lines: str) -> Iterator[Mosquitto]:
    broker = Mosquitto(folder, *lines).start()
    try:
        yield broker
    finally:
        broker.stop()


class Peer:
    """Another client on the broker: it listens to some topics and publishes with QoS 1, waiting for each batch."""

    def __init__(self, port: int, *topics: str, name: str = "peer", persistent: bool = False) -> None:
        self.received: list[tuple[str, bytes, bool]] = []
        self.client = mqtt.Client(
            CallbackAPIVersion.VERSION2, client_id=name, protocol=mqtt.MQTTv311, clean_session=not persistent
        )
        granted: list[object] = []
        self.client.on_message = lambda _c, _u, m: self.received.append((m.topic, m.payload, m.retain))
        self.client.on_subscribe = lambda *_: granted.append(1)
        self.client.max_queued_messages_set(0)
        self.client.connect("127.0.0.1", port)
        self.client.loop_start()
        for topic in topics:
            self.client.subscribe(topic, 1)
        wait_for(lambda: self.client.is_connected() and len(granted) == len(topics), what="the peer's subscriptions")

    def publish(self, *messages: tuple[str, bytes | str], qos: int = 1, retain: bool = False) -> None:
        for info in [self.client.publish(topic, payload, qos, retain) for topic, payload in messages]:
            info.wait_for_publish(PATIENCE_SECONDS)

    def payloads(self, start: str) -> list[bytes]:
        return [payload for topic, payload, _ in self.received if topic.startswith(start)]

    def close(self) -> None:
        self.client.disconnect()
        self.client.loop_stop()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()
