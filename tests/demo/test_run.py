import contextlib
import os
import re
import signal
import subprocess
import sys
from collections.abc import Iterator
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
    done = run("--for", "4s", "--pace", "300")
    assert done.returncode == 0, done.stderr
    assert "on Mosquitto" in done.stdout
    assert re.search(r"[1-9]\d* of \d+ faults that have begun were found", done.stdout)
    assert "mosquitto_sub -V 5 -h 127.0.0.1" in done.stdout
    assert "no safety function" in done.stdout


def test_a_demo_brings_its_own_broker_where_there_is_no_other(tmp_path: Path) -> None:
    done = run("--for", "4s", "--pace", "300", env=without_mosquitto(tmp_path))
    assert done.returncode == 0, done.stderr
    assert "the broker that the demo carries" in done.stdout
    assert re.search(r"[1-9]\d* of \d+ faults that have begun were found", done.stdout)


def alive(folder: Path) -> list[str]:
    """Return the command lines of all processes that belong to a demo with its files in this folder."""
    lines = []
    for path in Path("/proc").glob("[0-9]*/cmdline"):
        with contextlib.suppress(OSError):
            lines.append(path.read_bytes().decode(errors="replace"))
    return [line for line in lines if str(folder / "quietmill-demo-") in line]


@contextlib.contextmanager
def started(folder: Path, said: str, **more: str) -> Iterator[subprocess.Popen[bytes]]:
    """Run a demo without an end until it has said something; its output goes to `out.txt`."""
    env = {**os.environ, "TMPDIR": str(folder), **more}
    with (folder / "out.txt").open("w") as output:
        process = subprocess.Popen(command(), stdout=output, stderr=output, start_new_session=True, env=env)
    try:
        wait_for(lambda: said in (folder / "out.txt").read_text(), 60, said)
        yield process
    finally:
        process.kill()
        process.wait()


@pytest.mark.parametrize("said", ["faults are planted", "The service is online"])
def test_ctrl_c_ends_in_good_order_and_leaves_nothing_behind(tmp_path: Path, said: str) -> None:
    with started(tmp_path, said) as process:
        os.killpg(process.pid, signal.SIGINT)
        assert process.wait(60) == 0
    output = (tmp_path / "out.txt").read_text()
    assert "Where to look next" in output
    assert "Traceback" not in output
    assert alive(tmp_path) == []
    assert list(tmp_path.iterdir()) == [tmp_path / "out.txt"]


@pytest.mark.broker
def test_a_killed_demo_leaves_no_mosquitto_and_no_service(tmp_path: Path) -> None:
    with started(tmp_path, "The service is online") as process:
        assert len(alive(tmp_path)) == 2
        process.kill()
        wait_for(lambda: not alive(tmp_path), what="the end of broker and service")


def test_a_killed_demo_leaves_none_of_its_own_brokers(tmp_path: Path) -> None:
    env = without_mosquitto(tmp_path)
    with started(tmp_path, "The service is online", PYTHONPATH=env["PYTHONPATH"]) as process:
        assert len(alive(tmp_path)) == 2
        process.kill()
        wait_for(lambda: not alive(tmp_path), what="the end of broker and service")
