"""The demo: a broker, the simulated plant, the real service in its own process, and the scorecard."""

import contextlib
import signal
import sys
import threading
import time
from collections.abc import Callable, Generator
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Final

from rich.console import Console
from rich.table import Table
from rich.text import Text

from quietmill.demo.broker import DemoError, free_port, start_broker
from quietmill.demo.faults import plant_faults
from quietmill.demo.plant import Plant
from quietmill.demo.scorecard import Scorecard
from quietmill.demo.service import Service, adapted_settings, start_service
from quietmill.demo.watcher import Heard, Watcher
from quietmill.settings import Settings
from quietmill.settings.describe import SAFETY

__all__ = ["run_demo"]

INTERVAL: Final = 60_000_000
"""Simulated microseconds between two readings of a characteristic: a minute."""
DAY: Final = 86_400_000_000
SHORTEST_PAST: Final = 30 * DAY
LONGEST_PAST: Final = 20 * 365 * DAY
SHIFT_SECONDS: Final = 8 * 3600.0
START_SECONDS: Final = 60.0
"""The first start compiles."""
SETTLE_SECONDS: Final = 10.0
WAIT_SECONDS: Final = 0.05
STYLES: Final = {"raised": "bold yellow", "joined": "yellow", "returned": "dim"}
GOOD_NEWS: Final = "bold green"


def now_us() -> int:
    """Return the present in microseconds UTC."""
    return time.time_ns() // 1000


def past_us(duration_seconds: float | None, pace: float) -> int:
    """Return how far in the past simulated time must begin so as not to catch up with now.

    Where no end is set, that is after a shift; from then on the plant waits for each minute.
    """
    needed = int((duration_seconds or SHIFT_SECONDS) * pace) * INTERVAL + DAY
    return min(max(SHORTEST_PAST, needed), LONGEST_PAST)


class Demo:
    """One run of the demo, from the first reading to the scorecard."""

    def __init__(self, console: Console, settings: Settings, seed: int, begin: int) -> None:
        characteristics = settings.characteristics
        faults = plant_faults(characteristics, seed)
        self.console = console
        self.settings = settings
        self.plant = Plant(characteristics, faults, seed, begin, INTERVAL)
        self.scorecard = Scorecard([characteristic.id for characteristic in characteristics], faults)
        self._told: set[str] = set()

    def wait_for_service(self, watcher: Watcher, service: Service, stop: threading.Event) -> None:
        """Return when the service is online, or a person has had enough. Raises `DemoError`."""
        end = time.monotonic() + START_SECONDS
        while time.monotonic() < end and not stop.is_set():
            heard = watcher.hear(WAIT_SECONDS)
            if heard is not None and watcher.is_online(heard):
                return
            service.look_after()
            watcher.look_after()
        if not stop.is_set():
            log = service.last_lines()
            raise DemoError(f"the service was not online after {START_SECONDS:g} s; its log ended with:\n{log}")

    def go(
        self, watcher: Watcher, service: Service, duration_seconds: float | None, pace: float, stop: threading.Event
    ) -> None:
        """Run the plant; tell each signal as it comes. Simulated time never overtakes now. Raises `DemoError`."""
        begin = due = time.monotonic()
        with self.progress() as show:
            while not stop.is_set() and (duration_seconds is None or time.monotonic() < begin + duration_seconds):
                now = time.monotonic()
                wait = due - now
                if wait <= 0 and not watcher.full and self.plant.time <= now_us():
                    watcher.publish(self.plant.step())
                    # A plant that was held up makes good for a second at most.
                    due = max(due + 1 / pace, now - 1)
                    wait = due - now
                    show(f"point {self.plant.steps:,} of each, {self.plant.sent:,} readings")
                elif wait <= 0:
                    wait = WAIT_SECONDS
                self.tell(watcher.hear(min(wait, WAIT_SECONDS)))
                service.look_after()
                watcher.look_after()

    def settle(self, watcher: Watcher, service: Service) -> None:
        """Wait until the service has judged what was sent, and what it had to say has come. Raises `DemoError`."""
        end = time.monotonic() + SETTLE_SECONDS
        judged, waiting = service.progress()
        while (judged < self.plant.sent or waiting) and time.monotonic() < end:
            self.tell(watcher.hear(WAIT_SECONDS))
            service.look_after()
            watcher.look_after()
            judged, waiting = service.progress()
        watcher.say_last()
        end = time.monotonic() + SETTLE_SECONDS
        while time.monotonic() < end:
            heard = watcher.hear(WAIT_SECONDS)
            if heard is not None and watcher.is_last(heard):
                break
            self.tell(heard)
        if judged < self.plant.sent:
            missing = self.plant.sent - judged
            self.console.print(f"{missing:,} readings were still under way when the demo ended.", style="yellow")

    def tell(self, heard: Heard | None) -> None:
        """Print the sentence of an event, and put a raised one on the scorecard; events may come twice."""
        if heard is None or "data" not in heard.document or heard.document["id"] in self._told:
            return
        event, data = heard.document, heard.document["data"]
        self._told.add(event["id"])
        kind = event["type"].rpartition(".")[2]
        style = GOOD_NEWS if data["favourable"] and kind == "raised" else STYLES.get(kind, "")
        when = event["time"][:16].replace("T", " ")
        self.line(Text(when, "dim"), Text(data["summary"], style))
        if kind == "raised":
            self.scorecard.raised(data["characteristic"], data["point"]["number"])

    def line(self, when: Text, said: Text) -> None:
        """Print a time and what was said: beside it on a terminal, however long; elsewhere on one line."""
        if not self.console.is_terminal:
            self.console.print(Text("  ").join((when, said)))
            return
        beside = Table.grid(padding=(0, 2))
        beside.add_column(no_wrap=True)
        beside.add_row(when, said)
        self.console.print(beside)

    @contextlib.contextmanager
    def progress(self) -> Generator[Callable[[str], None]]:
        """Show on a terminal, and only there, how far the plant is; yields what takes the text."""
        if not self.console.is_terminal:
            yield lambda _text: None
            return
        with self.console.status("", spinner_style="dim") as status:
            yield lambda text: status.update(f"[dim]{text}[/]")

    def greet(self, broker: str, pace: float, seed: int) -> None:
        """Say what is going to happen."""
        count, faults = len(self.settings.characteristics), len(self.scorecard.faults)
        self.console.print(
            f"A tile works of {count} characteristics on {broker}: a reading a minute each, "
            f"{pace * INTERVAL / 1e6:,g} times as fast as real."
        )
        self.console.print(f"{faults} faults are planted in it (seed {seed}). The service does not know of them.")
        timeless = [each.id for each in self.settings.characteristics if each.payload is None or not each.payload.time]
        if timeless:
            self.console.print(f"Readings without a time get that of their arrival: {', '.join(timeless)}.")

    def addresses(self, service: Service) -> None:
        """Print where the running demo can be looked at."""
        prefix, port = self.settings.publish.prefix, self.settings.broker.port
        listen = f"mosquitto_sub -V 5 -h 127.0.0.1 -p {port}"
        self.console.print(f"  metrics   {service.metrics_address}")
        self.console.print(f"  signals   {listen} -t '{prefix}/signals/+' -v")
        self.console.print(f"  status    {listen} -t '{prefix}/status/+' -v")

    def farewell(self, service: Service) -> None:
        """Print the scorecard and where to look next."""
        console = self.console
        console.print()
        if self.plant.steps:
            console.print(self.scorecard.report(self.plant.steps))
        else:
            console.print("Stopped before the first reading.")
        console.print()
        console.print("[bold]Where to look next[/], while a demo runs (each prints its own ports at the start):")
        self.addresses(service)
        console.print("[bold]Your own plant[/]: write a settings file like config/minimal.yaml, then")
        console.print("  quietmill check plant.yaml && quietmill run plant.yaml")
        console.print()
        console.print(Text(SAFETY, style="dim"))


@contextlib.contextmanager
def stopped_by_signals() -> Generator[threading.Event]:
    """Yield what is set by Ctrl-C and SIGTERM, so that a demo ends in good order."""
    stop = threading.Event()
    before = {number: signal.signal(number, lambda *_: stop.set()) for number in (signal.SIGINT, signal.SIGTERM)}
    try:
        yield stop
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


def run_demo(duration_seconds: float | None, pace: float, seed: int) -> int:
    """Run the demo for so long, or until Ctrl-C; return the exit code.

    `pace` is points a second of each characteristic.
    """
    console = Console(highlight=False, soft_wrap=not sys.stdout.isatty())
    try:
        with contextlib.ExitStack() as stack:
            stop = stack.enter_context(stopped_by_signals())
            folder = Path(stack.enter_context(TemporaryDirectory(prefix="quietmill-demo-")))
            broker, port = stack.enter_context(start_broker(folder))
            settings = adapted_settings(folder, port, free_port())
            demo = Demo(console, settings, seed, (now_us() - past_us(duration_seconds, pace)) // INTERVAL * INTERVAL)
            demo.greet(broker, pace, seed)
            service = stack.enter_context(start_service(settings, folder / "service.log"))
            watcher = Watcher(settings)
            stack.callback(watcher.close)
            demo.wait_for_service(watcher, service, stop)
            if not stop.is_set():
                console.print("The service is online. Ctrl-C ends the demo.")
                demo.addresses(service)
                console.print()
                demo.go(watcher, service, duration_seconds, pace, stop)
                demo.settle(watcher, service)
            demo.farewell(service)
    except DemoError as error:
        Console(stderr=True, highlight=False, soft_wrap=True).print(Text(str(error)))
        return 1
    return 0
