"""The commands as a user types them: exit codes, help, errors without a traceback."""

import os
import socket
import subprocess
import sys
from pathlib import Path

import pytest

from quietmill import __version__

REPOSITORY = Path(__file__).parents[1]


def quietmill(*arguments: object, **more: object) -> subprocess.CompletedProcess[str]:
    command = [sys.executable, "-m", "quietmill", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, timeout=120, check=False, **more)


@pytest.mark.parametrize("command", ["run", "check", "replay", "demo"])
def test_every_command_explains_itself_with_an_example(command: str) -> None:
    done = quietmill(command, "--help")
    assert done.returncode == 0
    assert "Example:" in done.stdout


def test_the_version_is_said() -> None:
    assert quietmill("--version").stdout == f"quietmill {__version__}\n"


@pytest.mark.parametrize("arguments", [["nonsense"], ["check"], ["demo", "--for", "soon"], ["replay", "x.yaml"]])
def test_bad_usage_ends_with_2(arguments: list[str]) -> None:
    done = quietmill(*arguments)
    assert done.returncode == 2
    assert "Traceback" not in done.stderr


@pytest.mark.parametrize("name", ["minimal.yaml", "tileworks.yaml"])
def test_the_settings_that_ship_are_good(name: str) -> None:
    done = quietmill("check", REPOSITORY / "config" / name)
    assert done.returncode == 0, done.stderr
    assert "press1.force" in done.stdout
    assert "no safety function" in done.stdout


def test_a_terminal_without_the_trades_letters_is_no_reason_to_fail() -> None:
    environment = {**os.environ, "PYTHONIOENCODING": "ascii"}
    done = quietmill("check", REPOSITORY / "config" / "tileworks.yaml", env=environment)
    assert done.returncode == 0, done.stderr


@pytest.mark.parametrize("command", ["check", "run"])
def test_bad_settings_are_all_named_and_end_with_2(tmp_path: Path, command: str) -> None:
    config = tmp_path / "plant.yaml"
    config.write_text("broker: {ulr: x}\ncharacteristics: [{id: a, topic: t, baseline: {centre: 1, sigma: -2}}]\n")
    done = quietmill(command, config)
    assert done.returncode == 2
    assert f"{config}:1: broker.ulr: is no key here; did you mean 'url'?" in done.stderr
    assert "sigma: must be greater than 0, is -2" in done.stderr
    assert "Traceback" not in done.stderr


def test_an_address_that_is_taken_stops_the_start_with_1(tmp_path: Path) -> None:
    config = tmp_path / "plant.yaml"
    with socket.create_server(("127.0.0.1", 0)) as taken:
        config.write_text(
            f"web: {{listen: '127.0.0.1:{taken.getsockname()[1]}'}}\n"
            "characteristics: [{id: a, topic: t, baseline: {centre: 1, sigma: 2}}]\n"
        )
        done = quietmill("run", config)
    assert done.returncode == 1
    assert "quietmill did not start: web.listen 127.0.0.1:" in done.stderr
    assert "Traceback" not in done.stderr


def test_replay_reports_and_strict_ends_with_1_when_rows_were_bad(tmp_path: Path) -> None:
    data = tmp_path / "d.csv"
    data.write_text("time,characteristic,value\n10,press1.force,240\nx,press1.force,240\n")
    config = REPOSITORY / "config" / "minimal.yaml"
    done, strict = quietmill("replay", config, data), quietmill("replay", config, data, "--strict")
    assert (done.returncode, strict.returncode) == (0, 1)
    assert "1 accepted, 1 bad_time" in done.stdout
    assert f"{data}:3: bad_time" in done.stdout


def test_replay_of_a_missing_file_ends_with_1(tmp_path: Path) -> None:
    done = quietmill("replay", REPOSITORY / "config" / "minimal.yaml", tmp_path / "none.csv")
    assert done.returncode == 1
    assert done.stderr.startswith(f"{tmp_path / 'none.csv'}: cannot be read")


def test_replay_names_a_setting_that_does_not_exist(tmp_path: Path) -> None:
    done = quietmill(
        "replay", REPOSITORY / "config" / "minimal.yaml", tmp_path / "x.csv", "--set", "press1.force.cusum.hh=6"
    )
    assert done.returncode == 2
    assert "hh" in done.stderr


def test_an_installation_without_the_study_extra_replays_as_well(tmp_path: Path) -> None:
    """pyarrow makes replay faster, no more."""
    (tmp_path / "pyarrow.py").write_text("raise ImportError('not installed')\n")
    data = tmp_path / "d.csv"
    data.write_text("time,characteristic,value\n10,press1.force,240\n")
    script = f"import sys; sys.path.insert(0, {str(tmp_path)!r}); from quietmill.cli import main; main()"
    command = [sys.executable, "-c", script, "replay", str(REPOSITORY / "config" / "minimal.yaml"), str(data)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=120, check=False)
    assert done.returncode == 0, done.stderr
    assert "1 accepted" in done.stdout
