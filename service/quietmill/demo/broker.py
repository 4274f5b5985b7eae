"""The demo's broker: Mosquitto where it is installed, else the one that the extra `demo` brings."""

import contextlib
import ctypes
import os
import shutil
import signal
import socket
import subprocess
import time
from collections.abc import Generator
from importlib import import_module
from pathlib import Path
from typing import Final

__all__ = ["DemoError", "die_with_parent", "end", "free_port", "start_broker"]

START_SECONDS: Final = 10.0
END_SECONDS: Final = 10.0
PR_SET_PDEATHSIG: Final = 1

EMBEDDED: Final = """id = 0
[router]
id = 0
max_connections = 200
max_outgoing_packet_count = 200
max_segment_size = 10485760
max_segment_count = 10
[v5.1]
name = "v5"
listen = "127.0.0.1:{port}"
next_connection_delay_ms = 1
  [v5.1.connections]
  connection_timeout_ms = 60000
  max_payload_size = 262144
  max_inflight_count = 200
"""


class DemoError(Exception):
    """The demo cannot go on; the message says why and what to do."""


try:
    # Looked up here, since a child between fork and exec had better load nothing.
    PRCTL = ctypes.CDLL(None).prctl
except (OSError, AttributeError):
    PRCTL = None


def die_with_parent() -> None:
    """Ask the system to end this child process when its parent is gone, however that ended (Linux)."""
    if PRCTL is not None:
        PRCTL(PR_SET_PDEATHSIG, signal.SIGTERM)


def end(process: subprocess.Popen[bytes]) -> None:
    """End a child process: by asking, and if it will not hear, by force."""
    process.terminate()
    try:
        process.wait(END_SECONDS)
    except subprocess.TimeoutExpired:
        process.kill()
        process.wait()


def free_port() -> int:
    """Return a port of the loopback interface that is free now."""
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return probe.getsockname()[1]


def wait_until_it_listens(port: int, process: subprocess.Popen[bytes] | None, log: Path) -> None:
    """Return when somebody listens on a port. Raises `DemoError`."""
    deadline = time.monotonic() + START_SECONDS
    while time.monotonic() < deadline:
        if process is not None and process.poll() is not None:
            break
        with contextlib.suppress(OSError), socket.create_connection(("127.0.0.1", port), 1):
            return
        time.sleep(0.02)
    said = log.read_text(errors="replace").strip() if log.exists() else ""
    raise DemoError(f"the broker did not start: {said or 'it said nothing'}")


@contextlib.contextmanager
def mosquitto(program: str, folder: Path, port: int) -> Generator[None]:
    """Run Mosquitto as a child."""
    config, log = folder / "mosquitto.conf", folder / "mosquitto.log"
    lines = [f"listener {port} 127.0.0.1", "allow_anonymous true", "persistence false", "max_queued_messages 100000"]
    if os.geteuid() == 0:
        # Else it changes its user, and the system forgets that it is to die with its parent.
        lines.append("user root")
    config.write_text("\n".join([*lines, ""]))
    with log.open("wb") as output:
        process = subprocess.Popen(  # noqa: S603  the program was found on the PATH
            [program, "-c", str(config)],
            stdin=subprocess.DEVNULL,
            stdout=output,
            stderr=output,
            start_new_session=True,
            preexec_fn=die_with_parent,  # noqa: PLW1509  it only asks the system a favour
        )
    try:
        wait_until_it_listens(port, process, log)
        yield
    finally:
        end(process)


@contextlib.contextmanager
def embedded(folder: Path, port: int) -> Generator[None]:
    """Run the broker of the extra `demo`, a child of its own making that ends with this process."""
    try:
        iotcore = import_module("iotcore")
    except ImportError:
        raise DemoError(
            "no broker is here: install mosquitto, or the extra with `pip install 'quietmill[demo]'`"
        ) from None
    config = folder / "broker.toml"
    config.write_text(EMBEDDED.format(port=port))
    with contextlib.ExitStack() as stack:
        try:
            stack.enter_context(iotcore.Broker(config_path=str(config)))
        except (OSError, RuntimeError) as error:
            raise DemoError(f"the broker did not start: {error}") from None
        wait_until_it_listens(port, None, folder / "none")
        yield


@contextlib.contextmanager
def start_broker(folder: Path) -> Generator[tuple[str, int]]:
    """Run a broker on the loopback interface; yield its name and its port for MQTT 5. Raises `DemoError`."""
    port = free_port()
    program = shutil.which("mosquitto") or shutil.which("mosquitto", path="/usr/sbin:/usr/local/sbin")
    if program is not None:
        with mosquitto(program, folder, port):
            yield "Mosquitto", port
    else:
        with embedded(folder, port):
            yield "the broker that the demo carries", port
