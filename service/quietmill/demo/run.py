"""The demo: a broker, the simulated plant, the real service in its own process, and the scorecard."""

import contextlib
import json
import re
import signal
import subprocess
import sys
import threading
import time
import urllib.request
from collections.abc import Generator
from pathlib import Path
from queue import Empty, SimpleQueue
from tempfile import TemporaryDirectory
from typing import Any, Final

from paho.mqtt import client as mqtt
from paho.mqtt.enums import CallbackAPIVersion
from rich.console import Console
from rich.text import Text

from quietmill.demo.broker import DemoError, die_with_parent, free_port, start_broker
from quietmill.demo.faults import plant_faults
from quietmill.demo.plant import Plant
from quietmill.demo.scorecard import Scorecard
from quietmill.settings import Settings, load
from quietmill.settings.describe import SAFETY

__all__ = ["run_demo", "settings_file"]

INTERVAL: Final = 60_000_000
"""Simulated microseconds between two readings of a characteristic: a minute."""
HEAD_START: Final = 30 * 86_400_000_000
"""How far in the past simulated time begins."""
START_SECONDS: Final = 60.0
"""The first start compiles."""
SETTLE_SECONDS: Final = 10.0
PLACES: Final = (
    Path(__file__).parents[3] / "config" / "tileworks.yaml",
    Path(sys.prefix) / "share" / "quietmill" / "tileworks.yaml",
)


def settings_file() -> Path:
    """Return where the settings of the tile works stand: in the clone, or where the package was installed."""
    for place in PLACES:
        if place.is_file():
            return place
    raise DemoError("config/tileworks.yaml is missing: run the demo from a clone, or install the package again")


def adapted(folder: Path, broker_port: int, web_port: int) -> Path:
    """Write the plant's settings with the addresses of this run."""
    text = settings_file().read_text(encoding="utf-8")
    text = re.sub(r"mqtt://127\.0\.0\.1:\d+", f"mqtt://127.0.0.1:{broker_port}", text)
    text = re.sub(r"listen: 127\.0\.0\.1:\d+", f"listen: 127.0.0.1:{web_port}", text)
    path = folder / "tileworks.yaml"
    path.write_text(text, encoding="utf-8")
    return path


class Watcher:
    """The plant's own client on the broker: it publishes readings and hears what the service says."""

    def __init__(self, settings: Settings) -> None:
        self.settings = settings
        self.heard: SimpleQueue[tuple[str, bytes]] = SimpleQueue()
        self.sent = 0
        self.client = mqtt.Client(CallbackAPIVersion.VERSION2, client_id="tileworks-plant", protocol=mqtt.MQTTv5)
        self.client.on_message = lambda _client, _data, message: self.heard.put((message.topic, bytes(message.payload)))
        self.client.connect(settings.broker.host, settings.broker.port)
        prefix = settings.publish.prefix
        self.client.subscribe([(f"{prefix}/signals/+", 1), (f"{prefix}/service/+", 1)])
        self.client.loop_start()

    def publish(self, messages: list[tuple[str, bytes]]) -> None:
        """Send readings with QoS 1."""
        for topic, payload in messages:
            self.client.publish(topic, payload, qos=1)
        self.sent += len(messages)

    def hear(self, seconds: float) -> tuple[str, dict[str, Any]] | None:
        """Return the next document that the service published, waiting at most so long."""
        try:
            topic, payload = self.heard.get(timeout=max(seconds, 0.001))
        except Empty:
            return None
        return topic, json.loads(payload)

    def close(self) -> None:
        """Leave the broker."""
        self.client.disconnect()
        self.client.loop_stop()


@contextlib.contextmanager
def service(config: Path, log: Path) -> Generator[subprocess.Popen[bytes]]:
    """Run the service as its own process, its log in a file."""
    with log.open("wb") as output:
        process = subprocess.Popen(  # noqa: S603  ourselves
            [sys.executable, "-m", "quietmill", "run", str(config)],
            stdin=subprocess.DEVNULL,
            stdout=output,
            stderr=output,
            start_new_session=True,
            preexec_fn=die_with_parent,  # noqa: PLW1509  it only asks the system a favour
        )
    try:
        yield process
    finally:
        process.terminate()
        try:
            process.wait(10)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()


class Demo:
    """One run of the demo, from the first reading to the scorecard."""

    def __init__(self, console: Console, settings: Settings, watcher: Watcher, seed: int) -> None:
        characteristics = settings.characteristics
        faults = plant_faults(characteristics, seed)
        begin = (time.time_ns() // 1000 - HEAD_START) // INTERVAL * INTERVAL
        self.console = console
        self.settings = settings
        self.watcher = watcher
        self.plant = Plant(characteristics, faults, seed, begin, INTERVAL)
        self.scorecard = Scorecard([characteristic.id for characteristic in characteristics], faults)

    def wait_for_service(self, process: subprocess.Popen[bytes], log: Path) -> None:
        """Return when the service is online. Raises `DemoError`."""
        end = time.monotonic() + START_SECONDS
        while time.monotonic() < end:
            heard = self.watcher.hear(0.1)
            if heard is not None and heard[1].get("state") == "online":
                return
            self.look_after(process, log)
        raise DemoError(f"the service was not online after {START_SECONDS:g} s:\n{tail(log)}")

    @staticmethod
    def look_after(process: subprocess.Popen[bytes], log: Path) -> None:
        """Raise `DemoError` when the service has ended by itself."""
        if process.poll() is not None:
            raise DemoError(f"the service ended with {process.returncode}:\n{tail(log)}")

    def go(self, duration_seconds: float | None, pace: float, stop: threading.Event, check: Any) -> None:
        """Run the plant; tell each signal as it comes. Simulated time never overtakes now."""
        begin = time.monotonic()
        due = begin
        while not stop.is_set():
            now = time.monotonic()
            if duration_seconds is not None and now - begin >= duration_seconds:
                return
            if now >= due and self.plant.time <= time.time_ns() // 1000:
                self.watcher.publish(self.plant.step())
                due = max(due + 1 / pace, now - 1)
            self.tell(self.watcher.hear(min(due - time.monotonic(), 0.1)))
            check()

    def settle(self) -> None:
        """Wait until the service has judged what was sent, and said what it has to say."""
        end = time.monotonic() + SETTLE_SECONDS
        expected = self.plant.steps * len(self.settings.characteristics)
        accepted = 0
        while time.monotonic() < end:
            heard = self.watcher.hear(0.1)
            self.tell(heard)
            if heard is None and accepted and self.accepted() == accepted:
                return
            accepted = self.accepted()
            if accepted >= expected and heard is None:
                return

    def accepted(self) -> int:
        """Return how many readings the service has accepted, from its metrics; 0 when it does not answer."""
        with contextlib.suppress(OSError), urllib.request.urlopen(self.metrics, timeout=2) as answer:  # noqa: S310  our own address
            for line in answer.read().decode().splitlines():
                if line.startswith('quietmill_readings_total{outcome="accepted"}'):
                    return int(float(line.split()[-1]))
        return 0

    @property
    def metrics(self) -> str:
        """The address of the service's metrics."""
        return f"http://{self.settings.web.listen}/metrics"

    def tell(self, heard: tuple[str, dict[str, Any]] | None) -> None:
        """Print the sentence of an event, and put a raised one on the scorecard."""
        if heard is None or "/signals/" not in heard[0]:
            return
        event, data = heard[1], heard[1]["data"]
        when = event["time"][5:16].replace("T", " ")
        kind = event["type"].rsplit(".", 1)[1]
        style = {"raised": "bold green" if data["favourable"] else "bold yellow"}.get(kind, "dim")
        self.console.print(Text(f"{when}  {data['summary']}", style=style))
        if kind == "raised":
            self.scorecard.raised(data["characteristic"], data["point"]["number"])

    def farewell(self) -> None:
        """Print the scorecard and where to look next."""
        publish, broker = self.settings.publish, self.settings.broker
        console = self.console
        console.print()
        console.print(self.scorecard.report(self.plant.steps))
        console.print()
        console.print("[bold]Where to look next[/], while a demo runs:")
        console.print(f"  metrics   {self.metrics}")
        console.print(f"  signals   mosquitto_sub -h 127.0.0.1 -p {broker.port} -t '{publish.prefix}/signals/+' -v")
        console.print(f"  status    mosquitto_sub -h 127.0.0.1 -p {broker.port} -t '{publish.prefix}/status/+' -v")
        console.print("[bold]Your own plant[/]: write a settings file like config/minimal.yaml, then")
        console.print("  quietmill check plant.yaml && quietmill run plant.yaml")
        console.print()
        console.print(Text(SAFETY, style="dim"))


def tail(log: Path) -> str:
    """Return the last lines of a log."""
    return "\n".join(log.read_text(errors="replace").splitlines()[-10:]) or "(its log is empty)"


def run_demo(duration_seconds: float | None, pace: float, seed: int) -> int:
    """Run the demo for so long, or until Ctrl-C; return the exit code.

    `pace` is points a second of each characteristic.
    """
    console = Console(highlight=False, soft_wrap=not sys.stdout.isatty())
    stop = threading.Event()
    before = {number: signal.signal(number, lambda *_: stop.set()) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        with TemporaryDirectory(prefix="quietmill-demo-") as name, contextlib.ExitStack() as stack:
            folder = Path(name)
            broker, port = stack.enter_context(start_broker(folder))
            config, log = adapted(folder, port, free_port()), folder / "service.log"
            settings = load(config)
            watcher = Watcher(settings)
            stack.callback(watcher.close)
            console.print(
                f"A tile works of {len(settings.characteristics)} characteristics on {broker}, port {port}; "
                f"a reading a minute each, {pace * 60:g} times as fast as real. Ctrl-C ends it."
            )
            process = stack.enter_context(service(config, log))
            demo = Demo(console, settings, watcher, seed)
            demo.wait_for_service(process, log)
            console.print(f"The service is online; {demo.metrics}\n", style="dim")
            demo.go(duration_seconds, pace, stop, lambda: demo.look_after(process, log))
            demo.settle()
            demo.farewell()
    except DemoError as error:
        Console(stderr=True, highlight=False).print(Text(str(error)))
        return 1
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
    return 0
