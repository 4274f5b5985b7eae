"""From a real broker to trusted events, and back: what was said live is what a replay says."""

import csv
import json
import random
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest
from jsonschema import Draft202012Validator

from broker import Mosquitto, Peer, running, wait_for
from quietmill.settings import load
from quietmill.signals.schema import schema
from quietmill.study.replay import replay
from service import Service

pytestmark = pytest.mark.broker

CHARACTERISTICS = """[
  {id: press1.force, topic: tiles/press/1, payload: {value: /force, time: /at}, unit: kN,
   baseline: {centre: 240, sigma: 2}, rules: nelson, ewma: {lambda: 0.1, L: 2.814}, cusum: {k: 0.5, h: 5},
   specification: {lower: 235, upper: 246}},
  {id: press1.thickness, topic: tiles/press/1, payload: {value: /mm, time: /at}, unit: mm,
   baseline: {lower: 8.46, upper: 8.94}, rules: western_electric, spread: signal, favourable: low},
  {id: kiln1.zone1, topic: tiles/kiln/1, payload: {array: /samples, value: /t, time: /at},
   baseline: {centre: 1145, sigma: 3}, rules: [same_side, trend], points_kept: 10}]"""


def readings(count: int, seed: int = 3) -> list[tuple[str, float, str]]:
    """Return made-up history in time order: (characteristic, value, time), with shifts that start and end."""
    stream, begin, rows = random.Random(seed), datetime(2026, 3, 2, 6, tzinfo=UTC), []
    for step in range(count):
        at = (begin + timedelta(seconds=10 * step)).isoformat().replace("+00:00", "Z")
        shift = 1.5 if step % 200 > 120 else 0.0
        rows.append(("press1.force", round(stream.gauss(240 + 2 * shift, 2), 2), at))
        rows.append(("press1.thickness", round(stream.gauss(8.7 - 0.08 * shift, 0.08), 3), at))
        rows.append(("kiln1.zone1", round(stream.gauss(1145 + 3 * shift, 3), 1), at))
    return rows


def messages(rows: list[tuple[str, float, str]]) -> list[tuple[str, str]]:
    """Return the same as MQTT messages: two characteristics share one, the kiln sends lists of four."""
    found, samples = [], []
    for place in range(0, len(rows), 3):
        (_, force, at), (_, thickness, _), (_, t, _) = rows[place : place + 3]
        found.append(("tiles/press/1", json.dumps({"force": force, "mm": thickness, "at": at})))
        samples.append({"t": t, "at": at})
        if len(samples) == 4 or place + 3 >= len(rows):
            found.append(("tiles/kiln/1", json.dumps({"samples": samples})))
            samples = []
    return found


def replayed(service: Service, rows: list[tuple[str, float, str]], folder: Path) -> list[dict]:
    """Return the events of a replay of the same readings under the service's own settings."""
    data, signals = folder / "history.csv", folder / "events.jsonl"
    with data.open("w", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(["time", "characteristic", "value"])
        writer.writerows((at, name, value) for name, value, at in rows)
    replay(load(service.config), [data], signals=signals)
    return [json.loads(line) for line in signals.read_text().splitlines()]


def by_characteristic(events: list[dict]) -> dict[str, list[dict]]:
    found: dict[str, list[dict]] = {}
    for event in events:
        found.setdefault(event["subject"], []).append(event)
    return found


def live_events(peer: Peer) -> list[dict]:
    return [json.loads(payload) for payload in peer.payloads("quietmill/signals/")]


@pytest.mark.parametrize("version", ["5", "3.1.1"])
def test_live_events_are_those_of_a_replay_ids_included(tmp_path: Path, version: str) -> None:
    rows = readings(600)
    with running(tmp_path) as broker, Peer(broker.port, "quietmill/#") as peer:
        with Service.of(tmp_path, broker.url, CHARACTERISTICS, f", version: {version}") as service:
            peer.publish(*messages(rows))
            wait_for(lambda: service.accepted() == len(rows), what="all readings to be judged")
            expected = replayed(service, rows, tmp_path)
            wait_for(lambda: len(live_events(peer)) >= len(expected), what="all events")
        events = live_events(peer)
    assert len(expected) > 20
    assert by_characteristic(events) == by_characteristic(expected)
    validator = Draft202012Validator(schema())
    assert [error.message for event in events for error in validator.iter_errors(event)] == []


def test_nothing_is_lost_while_the_service_is_stopped(tmp_path: Path) -> None:
    rows = readings(300)
    half = 450
    with running(tmp_path) as broker, Peer(broker.port) as peer:
        service = Service.of(tmp_path, broker.url, CHARACTERISTICS).start()
        peer.publish(*messages(rows[:half]))
        wait_for(lambda: service.accepted() == half, what="the first half")
        assert service.stop() == 0
        peer.publish(*messages(rows[half:]))
        with service:
            wait_for(lambda: service.accepted() == len(rows) - half, what="the second half, kept by the broker")


def test_a_broker_that_stops_and_starts_again_loses_no_reading_and_no_event(tmp_path: Path) -> None:
    rows = readings(600)
    third = 600
    broker = Mosquitto(tmp_path).start()
    try:
        with Service.of(tmp_path, broker.url, CHARACTERISTICS) as service:
            with Peer(broker.port, "quietmill/#", name="listener", persistent=True) as peer:
                peer.publish(*messages(rows[:third]))
                wait_for(lambda: service.accepted() == third, what="the first third")
                before = list(peer.received)
            broker.stop()
            wait_for(lambda: service.get("/readyz")[0] == 503, what="the service to notice")
            assert "no connection to the broker" in service.get("/readyz")[1]
            broker.start()
            wait_for(lambda: service.get("/readyz")[0] == 200, what="the service to be back")
            with Peer(broker.port, "quietmill/#", name="listener", persistent=True) as peer:
                peer.publish(*messages(rows[third:]))
                wait_for(lambda: service.accepted() == len(rows), what="the rest")
                expected = {event["id"] for event in replayed(service, rows, tmp_path)}
                peer.received[:0] = before
                wait_for(lambda: {event["id"] for event in live_events(peer)} >= expected, what="all events")
                assert {event["id"] for event in live_events(peer)} == expected
    finally:
        broker.stop()


def test_status_and_service_are_retained_and_the_will_speaks_after_a_kill(tmp_path: Path) -> None:
    with running(tmp_path) as broker:
        service = Service.of(tmp_path, broker.url, CHARACTERISTICS).start()
        with Peer(broker.port) as sender:
            sender.publish(("tiles/press/1", '{"force": 260, "mm": 8.7, "at": "2026-03-02T06:00:00Z"}'))
            wait_for(lambda: service.accepted() == 2, what="both readings")
        with Peer(broker.port, "quietmill/status/+", "quietmill/service/+", name="late") as late:
            wait_for(lambda: len(late.received) >= 4, what="the retained documents")
            states = {topic: json.loads(payload) for topic, payload, _ in late.received}
            assert states["quietmill/service/quietmill"] == {"state": "online"}
            assert states["quietmill/status/press1.force"]["condition"] == "signal"
            assert states["quietmill/status/kiln1.zone1"] == {
                "condition": "in_control",
                "since": None,
                "signal": None,
                "acknowledged": False,
            }
            service.kill()
            wait_for(lambda: late.payloads("quietmill/service/")[-1] == b'{"state":"offline"}', what="the last will")


def test_garbage_is_counted_and_disturbs_nothing_else(tmp_path: Path) -> None:
    rows = readings(120)
    good = messages(rows)
    garbage = [
        *(
            b"",
            b"\xff\xfe",
            b'{"force": 24',
            b"[" * 10_000,
            b'{"force": 1e999, "mm": 8.7, "at": "2026-03-02T06:00:00Z"}',
        ),
        *(
            b"[[1],[2]]",
            b'{"force": NaN}',
            b"x" * 10_000_000,
            b'{"force": 240, "mm": 8.7, "at": "2200-01-01T00:00:00Z"}',
        ),
    ]
    with running(tmp_path) as broker, Peer(broker.port, "quietmill/signals/+") as peer:
        with Service.of(tmp_path, broker.url, CHARACTERISTICS) as service:
            for place, message in enumerate(good):
                peer.publish(
                    message, ("tiles/press/1", garbage[place // 3 % len(garbage)]) if place % 3 == 0 else message
                )
            wait_for(lambda: service.accepted() == len(rows), what="the good readings")
            expected = replayed(service, rows, tmp_path)
            wait_for(lambda: len(live_events(peer)) >= len(expected), what="all events")
            count = service.metric
            assert count('quietmill_readings_total{outcome="too_large"}') >= 1
            assert count('quietmill_readings_total{outcome="future"}') >= 2
            assert count('quietmill_readings_total{outcome="not_json"}') >= 4
        assert by_characteristic(live_events(peer)) == by_characteristic(expected)


def test_sigterm_ends_the_service_although_no_broker_answers(tmp_path: Path) -> None:
    service = Service.of(tmp_path, "mqtt://127.0.0.1:1", CHARACTERISTICS).start(ready=False)
    try:
        wait_for(lambda: "connection refused" in service.get("/readyz")[1], what="the reason")
    finally:
        assert service.stop() == 0
