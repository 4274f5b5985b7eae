import threading
import time
from io import StringIO
from pathlib import Path
from typing import Any

import pytest
from rich.console import Console

from quietmill.demo.run import INTERVAL, LONGEST_PAST, Demo, now_us, past_us
from quietmill.demo.service import adapted_settings
from quietmill.demo.watcher import Heard


class SilentPlantSide:
    """Stands for broker and service: takes every message at once and never says anything."""

    full = False

    def __init__(self) -> None:
        self.messages = 0

    def publish(self, messages) -> None:
        self.messages += len(messages)

    def hear(self, seconds: float) -> None:
        time.sleep(min(seconds, 0.001))

    def look_after(self) -> None:
        pass


@pytest.fixture
def output() -> StringIO:
    return StringIO()


def demo(folder: Path, output: StringIO, begin: int = 0, width: int = 200, terminal: bool = False) -> Demo:
    console = Console(file=output, width=width, highlight=False, force_terminal=terminal, color_system=None)
    return Demo(console, adapted_settings(folder, 1, 2), 1, begin)


def event(number: int, kind: str = "raised", name: str = "press1.moisture", identity: str = "a") -> Heard:
    data = {"characteristic": name, "favourable": False, "summary": f"{name} [is] high", "point": {"number": number}}
    document = {"id": identity, "type": f"quietmill.signal.{kind}", "time": "2026-03-02T08:14:30Z", "data": data}
    return Heard(f"quietmill/signals/{name}", document)


def test_each_event_is_told_with_its_time_and_its_sentence(tmp_path: Path, output: StringIO) -> None:
    demo(tmp_path, output).tell(event(5))
    assert output.getvalue() == "2026-03-02 08:14  press1.moisture [is] high\n"


def test_on_a_narrow_terminal_a_sentence_goes_on_beneath_its_beginning(tmp_path: Path, output: StringIO) -> None:
    demo(tmp_path, output, width=36, terminal=True).tell(event(5))
    assert output.getvalue().split("\n") == [
        "2026-03-02 08:14  press1.moisture   ",
        " " * 18 + "[is] high         ",
        "",
    ]


def test_elsewhere_a_sentence_is_one_line_however_long(tmp_path: Path, output: StringIO) -> None:
    one = demo(tmp_path, output, width=36)
    one.console.soft_wrap = True
    one.tell(event(5))
    assert output.getvalue() == "2026-03-02 08:14  press1.moisture [is] high\n"


def test_the_greeting_names_what_sends_no_time(tmp_path: Path, output: StringIO) -> None:
    demo(tmp_path, output).greet("Mosquitto", 5.0, 1)
    assert "38 characteristics on Mosquitto: a reading a minute each, 300 times as fast" in output.getvalue()
    assert "Readings without a time get that of their arrival: sorting.line_speed." in output.getvalue()


def test_an_event_that_comes_twice_is_told_and_counted_once(tmp_path: Path, output: StringIO) -> None:
    one = demo(tmp_path, output)
    for identity in ("a", "a", "b"):
        one.tell(event(5, identity=identity))
    assert output.getvalue().count("\n") == 2
    assert one.scorecard.false == ["press1.moisture"] * 2


def test_only_raised_signals_stand_on_the_scorecard(tmp_path: Path, output: StringIO) -> None:
    one = demo(tmp_path, output)
    one.tell(event(5, kind="joined"))
    one.tell(event(6, kind="returned", identity="b"))
    one.tell(Heard("quietmill/service/quietmill-tileworks", {"state": "online"}))
    one.tell(None)
    assert one.scorecard.false == []


def test_simulated_time_never_overtakes_now(tmp_path: Path, output: StringIO) -> None:
    one = demo(tmp_path, output, begin=now_us() - 3 * INTERVAL + INTERVAL // 2)
    silent: Any = SilentPlantSide()
    one.go(silent, silent, 1.0, 1000, threading.Event())
    assert one.plant.steps == 3


def test_a_plant_whose_broker_is_behind_waits(tmp_path: Path, output: StringIO) -> None:
    one = demo(tmp_path, output)
    behind: Any = SilentPlantSide()
    behind.full = True
    one.go(behind, behind, 0.2, 1000, threading.Event())
    assert one.plant.steps == behind.messages == 0


@pytest.mark.parametrize(("duration", "pace"), [(60.0, 5.0), (600.0, 1000.0), (None, 5.0)])
def test_simulated_time_begins_early_enough_for_the_whole_run(duration: float | None, pace: float) -> None:
    assert (duration or 3600) * pace * INTERVAL < past_us(duration, pace) <= LONGEST_PAST
