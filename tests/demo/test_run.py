import contextlib
import os
import re
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from broker import wait_for


def command(*options: str) -> list[str]:
    return [sys.executable, "-m", "quietmill", "demo", *options]


HIDING = """
import shutil

which = shutil.which
shutil.which = lambda name, *rest, **more: None if name == "mosquitto" else which(name, *rest, **more)
"""


def without_mosquitto(tmp_path: Path) -> dict[str, str]:
    """Return an environment in which no Mosquitto is to be found."""
    (tmp_path / "sitecustomize.py").write_text(HIDING)
    return {**os.environ, "PYTHONPATH": os.pathsep.join([str(tmp_path), os.environ.get("PYTHONPATH", "")])}


def run(*options: str, env: dict[str, str] | None = None) -> subprocess.CompletedProcess[str]:
    return subprocess.run(command(*options), capture_output=True, text=True, timeout=120, env=env, check=False)


@pytest.mark.broker
def test_a_demo_on_mosquitto_ends_with_a_scorecard() -> None:
    done = run("--for", "4s", "--pace", "60")
    assert done.returncode == 0, done.stderr
    assert "on Mosquitto" in done.stdout
    assert re.search(r"[1-9]\d* of 12 faults that have begun were found", done.stdout)
    assert "mosquitto_sub -h 127.0.0.1" in done.stdout
    assert "no safety function" in done.stdout


def test_a_demo_brings_its_own_broker_where_there_is_no_other(tmp_path: Path) -> None:
    done = run("--for", "4s", "--pace", "60", env=without_mosquitto(tmp_path))
    assert done.returncode == 0, done.stderr
    assert "the broker that the demo carries" in done.stdout
    assert re.search(r"[1-9]\d* of 12 faults that have begun were found", done.stdout)


def alive() -> list[str]:
    """Return the command lines of all processes that belong to a demo."""
    lines = []
    for path in Path("/proc").glob("[0-9]*/cmdline"):
        with contextlib.suppress(OSError):
            lines.append(path.read_bytes().decode(errors="replace"))
    return [line for line in lines if "quietmill-demo-" in line]


def test_ctrl_c_ends_in_good_order_and_leaves_nobody_behind(tmp_path: Path) -> None:
    with (tmp_path / "out.txt").open("w+") as output:
        process = subprocess.Popen(command(), stdout=output, stderr=output, start_new_session=True)
        wait_for(lambda: "The service is online" in (tmp_path / "out.txt").read_text(), 60, "the service")
        time.sleep(0.5)
        os.killpg(process.pid, signal.SIGINT)
        assert process.wait(60) == 0
    said = (tmp_path / "out.txt").read_text()
    assert "faults that have begun were found" in said
    assert "Traceback" not in said
    assert alive() == []
