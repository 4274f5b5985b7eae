"""The real service in its own process, on the settings of the tile works."""

import contextlib
import re
import subprocess
import sys
from collections.abc import Generator
from http.client import HTTPConnection, HTTPException
from pathlib import Path
from typing import Final

from quietmill.demo.broker import DemoError, die_with_parent, end
from quietmill.settings import Settings, SettingsError, load

__all__ = ["Service", "adapted_settings", "settings_file", "start_service"]

PLACES: Final = (
    Path(__file__).parents[3] / "config" / "tileworks.yaml",
    Path(sys.prefix) / "share" / "quietmill" / "tileworks.yaml",
)
LAST_LINES: Final = 10
SCRAPE_SECONDS: Final = 2.0


def settings_file() -> Path:
    """Return where the settings of the tile works stand: in the clone, or where the package was installed."""
    for place in PLACES:
        if place.is_file():
            return place
    raise DemoError("config/tileworks.yaml is missing: run the demo from a clone, or install the package again")


def adapted_settings(folder: Path, broker_port: int, web_port: int) -> Settings:
    """Write the plant's settings with the addresses of this run, and load them. Raises `DemoError`."""
    source = settings_file()
    text = source.read_text(encoding="utf-8")
    text = re.sub(r"mqtt://127\.0\.0\.1:\d+", f"mqtt://127.0.0.1:{broker_port}", text)
    text = re.sub(r"listen: 127\.0\.0\.1:\d+", f"listen: 127.0.0.1:{web_port}", text)
    path = folder / source.name
    path.write_text(text, encoding="utf-8")
    try:
        settings = load(path)
    except SettingsError as error:
        problems = "\n".join(str(problem) for problem in error.problems)
        raise DemoError(f"{source} was changed and has errors:\n{problems}".replace(str(path), source.name)) from None
    if (settings.broker.port, settings.web.port) != (broker_port, web_port):
        raise DemoError(f"{source} was changed: its broker and web must stand at 127.0.0.1 with a port")
    return settings


class Service:
    """The running service, as the demo sees it from outside."""

    def __init__(self, process: subprocess.Popen[bytes], log: Path, settings: Settings) -> None:
        self._process = process
        self._log = log
        self._web = settings.web
        self.metrics_address = f"http://{settings.web.listen}/metrics"

    def look_after(self) -> None:
        """Raise `DemoError` when the service has ended by itself."""
        code = self._process.poll()
        if code is not None:
            how = f"with exit code {code}" if code >= 0 else f"by signal {-code}"
            raise DemoError(f"the service ended {how}; its log ended with:\n{self.last_lines()}")

    def last_lines(self) -> str:
        """Return how the log ends."""
        return "\n".join(self._log.read_text(errors="replace").splitlines()[-LAST_LINES:]) or "(nothing)"

    def progress(self) -> tuple[int, int]:
        """Return how many readings were judged or refused and how many events wait for the broker.

        Both come from the metrics; where nobody answers, nothing was judged.
        """
        # Not by urllib, which would ask a proxy of the user's.
        connection = HTTPConnection(self._web.host, self._web.port, timeout=SCRAPE_SECONDS)
        with contextlib.suppress(OSError, HTTPException), contextlib.closing(connection):
            connection.request("GET", "/metrics")
            return counted(connection.getresponse().read().decode())
        return 0, 0


def counted(metrics: str) -> tuple[int, int]:
    """Return readings and waiting events, from the text of the metrics."""
    readings = events = 0
    for line in metrics.splitlines():
        if line.startswith("quietmill_readings_total{"):
            readings += int(float(line.split()[-1]))
        elif line.startswith("quietmill_outbox_events "):
            events = int(float(line.split()[-1]))
    return readings, events


@contextlib.contextmanager
def start_service(settings: Settings, log: Path) -> Generator[Service]:
    """Run the service, its log in a file."""
    with log.open("wb") as output:
        process = subprocess.Popen(  # noqa: S603  ourselves
            [sys.executable, "-m", "quietmill", "run", str(settings.path)],
            stdin=subprocess.DEVNULL,
            stdout=output,
            stderr=output,
            start_new_session=True,
            preexec_fn=die_with_parent,  # noqa: PLW1509  it only asks the system a favour
        )
    try:
        yield Service(process, log, settings)
    finally:
        end(process)
