"""Replay: the same engine, its files, and what it says in the end."""

import csv
import json
import random
from io import StringIO
from pathlib import Path

import pytest
from jsonschema import Draft202012Validator
from rich.console import Console

from quietmill.settings import Settings, load
from quietmill.signals.schema import schema
from quietmill.study.columns import DataError
from quietmill.study.replay import POINT_COLUMNS, Replayed, replay

CONTRACT = (
    "characteristic,number,time,value,centre,lower,upper,z,"
    "spread,spread_lower,spread_upper,ewma,cusum_high,cusum_low,rules"
)
PLANT = """
characteristics:
  - {id: press1.force, topic: t/1, payload: {value: /v, time: /t}, unit: kN, baseline: {centre: 240, sigma: 2},
     rules: [beyond_limits, same_side], ewma: {lambda: 0.1, L: 2.814}, cusum: {k: 0.5, h: 5}}
  - {id: press2.force, topic: t/2, payload: {value: /v, time: /t}, baseline: {centre: 240, sigma: 2}}
"""


@pytest.fixture
def plant(tmp_path: Path) -> Settings:
    path = tmp_path / "plant.yaml"
    path.write_text(PLANT)
    return load(path)


def history(tmp_path: Path, count: int = 400, seed: int = 2) -> Path:
    """Write made-up history in which press1 shifts by 2 sigma for a while."""
    stream, path = random.Random(seed), tmp_path / "march.csv"
    with path.open("w", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(["time", "characteristic", "value"])
        for step in range(count):
            shift = 4 if 200 <= step < 260 else 0
            writer.writerow([1_772_400_000 + 60 * step, "press1.force", round(stream.gauss(240 + shift, 2), 2)])
            writer.writerow([1_772_400_000 + 60 * step, "press2.force", round(stream.gauss(240, 2), 2)])
    return path


def said(replayed: Replayed, width: int = 100) -> str:
    output = StringIO()
    Console(file=output, width=width).print(replayed.report())
    return output.getvalue()


def test_a_shift_in_history_is_found_and_dated(tmp_path: Path, plant: Settings) -> None:
    replay(plant, [history(tmp_path)], signals=tmp_path / "s.jsonl")
    events = [json.loads(line) for line in (tmp_path / "s.jsonl").read_text().splitlines()]
    validator = Draft202012Validator(schema())
    assert [error.message for event in events for error in validator.iter_errors(event)] == []
    found = [event for event in events if event["type"].endswith("raised") and event["data"]["point"]["number"] > 200]
    assert found[0]["subject"] == "press1.force"
    assert 196 <= found[0]["data"]["onset"]["point"] <= 204
    assert found[0]["data"]["direction"] == "high"


def test_points_have_a_line_each_with_the_columns_of_the_contract(tmp_path: Path, plant: Settings) -> None:
    replayed = replay(plant, [history(tmp_path, 50)], points=tmp_path / "p.csv")
    with (tmp_path / "p.csv").open(newline="") as file:
        lines = list(csv.DictReader(file))
    assert len(lines) == replayed.points.sum() == 100
    assert tuple(lines[0]) == POINT_COLUMNS == tuple(CONTRACT.split(","))
    first, plain = lines[0], lines[1]
    assert (first["number"], first["time"]) == ("1", "2026-03-01T21:20:00Z")
    assert first["spread"] == ""
    assert float(first["z"]) == (float(first["value"]) - 240) / 2
    assert (first["lower"], first["upper"]) == ("234.0", "246.0")
    assert (plain["lower"], plain["upper"], plain["ewma"]) == ("232.0", "248.0", "")
    assert float(lines[2]["spread"]) == pytest.approx(abs(float(lines[2]["value"]) - float(first["value"])))


def test_the_rules_that_hold_are_joined_in_the_order_of_the_table(tmp_path: Path, plant: Settings) -> None:
    replay(plant, [history(tmp_path)], points=tmp_path / "p.csv")
    with (tmp_path / "p.csv").open(newline="") as file:
        held = {line["rules"] for line in csv.DictReader(file)}
    assert "" in held
    assert "same_side;ewma;cusum" in held


def test_the_same_data_give_the_same_events_today_and_next_year(tmp_path: Path, plant: Settings) -> None:
    path = history(tmp_path)
    for name in ("one", "two"):
        replay(plant, [path], signals=tmp_path / name)
    assert (tmp_path / "one").read_bytes() == (tmp_path / "two").read_bytes()


def test_other_settings_can_be_tried(tmp_path: Path, plant: Settings) -> None:
    path = history(tmp_path)
    assert replay(plant, [path]).raised[0] > 0
    overrides = ["press1.force.cusum.h=500", "press1.force.rules=[]", "press1.force.ewma.L=50"]
    assert replay(load(plant.path, overrides), [path]).raised[0] == 0


def test_the_closing_table_counts_points_outcomes_and_signals(tmp_path: Path, plant: Settings) -> None:
    path = history(tmp_path)
    path.write_text(path.read_text() + "x,press1.force,240\n1772400000,press1.force,240\n")
    replayed = replay(plant, [path])
    text = said(replayed)
    assert f"{path}:802: bad_time" in text.replace("\n", "")
    assert "802 readings" in text
    assert "800 accepted, 1 late, 1 bad_time" in text
    assert replayed.refused == 1
    assert "press1.force" in text
    assert "in all" in text


def test_many_characteristics_and_bad_rows_do_not_flood_the_screen(tmp_path: Path, plant: Settings) -> None:
    path = tmp_path / "bad.csv"
    path.write_text("time,characteristic,value\n" + "x,press1.force,1\n" * 500)
    text = said(replay(plant, [path]))
    assert "and 480 more rows that gave no reading" in text
    assert len(text.splitlines()) < 60


def test_progress_is_told_and_ends_with_the_whole_file(tmp_path: Path, plant: Settings) -> None:
    path, told = history(tmp_path), []
    replay(plant, [path], progress=lambda readings, done: told.append((readings, done)))
    assert told[-1] == (800, path.stat().st_size)


def test_a_result_that_cannot_be_written_is_said_so(tmp_path: Path, plant: Settings) -> None:
    with pytest.raises(DataError, match="cannot be written"):
        replay(plant, [history(tmp_path)], points=tmp_path / "no" / "where.csv")
