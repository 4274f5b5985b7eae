"""What `check` prints, at any width and in a pipe."""

from io import StringIO

import pytest
from rich.cells import cell_len
from rich.console import Console

from quietmill.settings import Settings
from quietmill.settings.describe import SAFETY, describe
from settings.conftest import ENTRY, Loaded, plant

SIGMA = "\N{GREEK SMALL LETTER SIGMA}"


def printed(settings: Settings, width: int | None = None) -> list[str]:
    """The lines of a description; without a width as in a pipe."""
    console = Console(file=StringIO(), width=width or 80, highlight=False)
    console.print(describe(settings), soft_wrap=width is None)
    assert isinstance(console.file, StringIO)
    return console.file.getvalue().splitlines()


def line_of(settings: Settings, name: str = "press1.force") -> list[str]:
    """The cells of a characteristic's line."""
    (line,) = (line for line in printed(settings) if line.startswith(f"{name} "))
    return [cell.strip() for cell in line.split("  ") if cell.strip()]


def test_a_line_has_limits_rules_and_topic(loaded: Loaded) -> None:
    cells = line_of(
        loaded(plant("unit: kN", "rules: [beyond_limits, same_side, trend]", "ewma: {lambda: 0.1, L: 2.8}"))
    )
    assert cells[1:] == [
        "234",
        "240",
        "246 kN",
        f"beyond 3{SIGMA}, same_side 9, trend, ewma 0.1/2.8",
        "tiles/press/1/force",
    ]


@pytest.mark.parametrize(
    ("keys", "lower", "upper"),
    [(["rules: [{beyond_limits: 2.5}]"], "235", "245"), (["cusum: {k: 1, h: 5}"], "234", "246"), ([], "232", "248")],
)
def test_limits_stand_at_the_multiple_or_at_three_sigma(
    loaded: Loaded, keys: list[str], lower: str, upper: str
) -> None:
    cells = line_of(loaded(plant(*keys)))
    assert (cells[1], cells[3]) == (lower, upper)


def test_all_eight_rules_are_called_nelson(loaded: Loaded) -> None:
    assert "nelson, cusum 0.5/5" in line_of(loaded(plant("rules: nelson", "cusum: {k: 0.5, h: 5}")))


def test_a_side_and_a_spread_are_told(loaded: Loaded) -> None:
    cells = line_of(loaded(plant("rules: [trend]", "side: low", "spread: signal")))
    assert "trend, spread, low side only" in cells


def test_the_head_says_what_the_service_is_joined_to(loaded: Loaded) -> None:
    head = "broker: {url: 'ws://[::1]/mqtt', client_id: mill, user: line1, session_expiry: 90s}\nrecord: sqlite:a.db\n"
    lines = printed(loaded(plant(head=head)))
    assert lines[:3] == [
        "broker     ws://[::1]:80/mqtt, MQTT 5, not encrypted, user line1",
        "session    mill, kept by the broker for 90s without the service",
        "record     sqlite:a.db: state and what is to be said; no history yet",
    ]
    assert lines[3:5] == [
        "web        http://127.0.0.1:8088/metrics, /healthz, /readyz",
        "publishes  below quietmill/: signals, status, service; as source quietmill",
    ]


def test_a_session_of_the_older_protocol_is_the_brokers_to_keep(loaded: Loaded) -> None:
    lines = printed(loaded(plant(head="broker: {version: 3.1.1, url: mqtts://broker}\n")))
    assert lines[0] == "broker     mqtts://broker:8883, MQTT 3.1.1, encrypted, no user"
    assert lines[1] == "session    quietmill, kept by the broker for as long as it is set to (MQTT 3.1.1)"


def test_the_end_counts_and_warns(loaded: Loaded) -> None:
    text = plant("payload: {value: /v, time: /t}") + ENTRY.replace("press1.force", "press1.count")
    lines = printed(loaded(text))
    assert "The settings are good: 2 characteristics on 1 topic." in lines
    assert "Without payload.time, press1.count takes its time from the arrival of the message." in lines
    assert lines[-1] == SAFETY


def many(loaded: Loaded) -> Settings:
    names = ", ".join(f"line{n:03}" for n in range(250))
    keys = "    baseline: {centre: 8.7, sigma: 0.08}\n    rules: nelson\n    spread: signal\n    unit: mm\n"
    return loaded(
        f"characteristics:\n  - family: press{{n}}.{{what}}\n    each: {{n: [{names}], what: [a, b, c, thickness]}}\n"
        f"    topic: tiles/press/{{n}}/of/a/rather/long/line/of/machines\n{keys}"
    )


@pytest.mark.parametrize("width", [60, 80, 100, 140])
def test_a_thousand_lines_fit_any_terminal(loaded: Loaded, width: int) -> None:
    lines = printed(many(loaded), width)
    assert max(map(cell_len, lines)) <= width
    assert len([line for line in lines if "8.46" in line]) == 1000
    assert not any(line.endswith(" ") for line in lines)


def test_a_narrow_terminal_has_a_line_above_each_topics_characteristics(loaded: Loaded) -> None:
    lines = printed(many(loaded), 80)
    topics = [place for place, line in enumerate(lines) if line.startswith("tiles/press/")]
    assert len(topics) == 250
    assert [line.split()[0] for line in lines[topics[0] + 1 : topics[0] + 3]] == ["pressline000.a", "pressline000.b"]


def test_in_a_pipe_every_characteristic_is_one_whole_line(loaded: Loaded) -> None:
    settings = many(loaded)
    lines = [line for line in printed(settings) if line.startswith("pressline")]
    assert [line.split()[0] for line in lines] == [one.id for one in settings.characteristics]
    assert all(line.endswith(one.topic) for line, one in zip(lines, settings.characteristics, strict=True))


def test_no_text_of_a_plant_breaks_a_line_or_moves_the_cursor(loaded: Loaded) -> None:
    cells = line_of(loaded(plant('unit: "a\\nb\\u001b[2J"')))
    assert cells[3] == "248 a\N{REPLACEMENT CHARACTER}b\N{REPLACEMENT CHARACTER}[2J"


def test_what_looks_like_markup_is_printed_as_it_is(loaded: Loaded) -> None:
    assert line_of(loaded(plant("unit: '[bold]'")))[3] == "248 [bold]"
