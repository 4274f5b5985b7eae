"""The service with its record: what happens when the file cannot be written, is held, or is gone."""

import contextlib
import signal
import sqlite3
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

from broker import Peer, running, wait_for
from quietmill.model import Outcome
from quietmill.monitor import Monitor
from quietmill.record.record import Record
from quietmill.settings import load
from record.test_crash import PLANT, service_with_record
from service import Service
from test_end_to_end import live_events, messages, readings, replayed

pytestmark = pytest.mark.broker


def test_signals_and_numbers_go_on_after_a_stop_in_good_order(tmp_path: Path) -> None:
    rows = readings(300)
    sent = messages(rows)
    with running(tmp_path) as broker, Peer(broker.port, "quietmill/#") as peer:
        service = service_with_record(tmp_path, broker)
        for part in range(3):
            service.start()
            peer.publish(*sent[len(sent) * part // 3 : len(sent) * (part + 1) // 3])
            wait_for(lambda: service.metric("quietmill_outbox_events") == 0 and service.accepted() > 0, what="the part")
            assert service.stop() == 0
        expected = replayed(service, rows, tmp_path)
        service.start()
        wait_for(
            lambda: {event["id"] for event in live_events(peer)} >= {event["id"] for event in expected},
            what="all events",
        )
        service.stop()
    assert {event["id"] for event in live_events(peer)} == {event["id"] for event in expected}


def test_a_record_that_cannot_be_written_holds_readings_until_it_can(tmp_path: Path) -> None:
    rows = readings(60)
    with contextlib.ExitStack() as stack:
        broker = stack.enter_context(running(tmp_path))
        peer = stack.enter_context(Peer(broker.port, "quietmill/#"))
        with service_with_record(tmp_path, broker) as service:
            holder = sqlite3.connect(tmp_path / "quietmill.db", isolation_level=None)
            holder.execute("BEGIN IMMEDIATE")
            peer.publish(*messages(rows))
            wait_for(lambda: "another program holds the file" in service.get("/readyz")[1], what="the reason")
            assert service.accepted() == 0
            holder.execute("ROLLBACK")
            holder.close()
            wait_for(lambda: service.accepted() == len(rows), what="all readings")
            wait_for(lambda: service.get("/readyz")[0] == 200, what="the service to be ready")
            expected = {event["id"] for event in replayed(service, rows, tmp_path)}
            wait_for(lambda: {event["id"] for event in live_events(peer)} >= expected, what="all events")
            assert service.stop() == 0
    assert [entry["reason"] for entry in service.log() if entry["event"] == "the record cannot be written"] == [
        "cannot be written: another program holds the file"
    ]


def test_a_service_that_holds_too_much_hangs_up_and_lets_the_broker_queue(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("quietmill.passage.HELD_MESSAGES", 10)
    rows = readings(60)
    with contextlib.ExitStack() as stack:
        broker = stack.enter_context(running(tmp_path))
        peer = stack.enter_context(Peer(broker.port))
        monitor = Monitor(load(service_with_record(tmp_path, broker).config))
        stack.callback(monitor.close)
        monitor.start()
        wait_for(lambda: monitor.turn(0.02) or not list(monitor.troubles()), what="the service to be ready")
        holder = sqlite3.connect(tmp_path / "quietmill.db", isolation_level=None)
        holder.execute("BEGIN IMMEDIATE")
        for message in messages(rows):
            peer.client.publish(*message, 1)
        wait_for(lambda: monitor.turn(0.02) or not monitor.connection.connected, what="the service to hang up")
        assert any("more readings than it can keep" in trouble for trouble in monitor.troubles())
        holder.execute("ROLLBACK")
        holder.close()
        accepted = monitor.tally.outcomes
        wait_for(lambda: monitor.turn(0.02) or accepted[Outcome.ACCEPTED] == len(rows), what="all readings")
        assert accepted.sum() == len(rows)
        assert monitor.connection.connected


def test_a_record_that_is_deleted_stops_the_service_before_it_acknowledges(tmp_path: Path) -> None:
    with running(tmp_path) as broker, Peer(broker.port) as peer:
        service = service_with_record(tmp_path, broker).start()
        process = service.process
        (tmp_path / "quietmill.db").unlink()
        peer.publish(("tiles/press/1", '{"force": 240, "mm": 8.7, "at": "2026-03-02T06:00:00Z"}'))
        assert process is not None
        assert process.wait(30) == 1
        service.process = None
        assert "was deleted or replaced while the service ran" in service.log_file.read_text()
        assert "Traceback" not in service.log_file.read_text()
        with service_with_record(tmp_path, broker) as again:
            wait_for(lambda: again.accepted() == 2, what="the message, which was not acknowledged")


def test_two_services_cannot_share_a_record(tmp_path: Path) -> None:
    with running(tmp_path) as broker, service_with_record(tmp_path, broker) as service:
        second = subprocess.run(
            [sys.executable, "-m", "quietmill", "run", str(service.config)],
            capture_output=True,
            text=True,
            timeout=60,
            check=False,
        )
    assert second.returncode == 1
    assert "another running service holds it" in second.stderr
    assert "Traceback" not in second.stderr


def test_an_edited_settings_file_is_taken_over_at_the_next_start(tmp_path: Path) -> None:
    with running(tmp_path) as broker, Peer(broker.port, "quietmill/#") as peer:
        service = service_with_record(tmp_path, broker).start()
        peer.publish(("tiles/press/1", '{"force": 260, "mm": 8.7, "at": "2026-03-02T06:00:00Z"}'))
        wait_for(lambda: len(live_events(peer)) == 1, what="the signal")
        service.stop()
        service.config.write_text(service.config.read_text().replace("centre: 240, sigma: 2", "centre: 240, sigma: 3"))
        service.start()
        wait_for(lambda: len(live_events(peer)) == 2, what="the end of the episode")
        returned = live_events(peer)[1]
        assert (returned["type"], returned["data"]["ended"]) == ("quietmill.signal.returned", "reload")
        peer.publish(("tiles/press/1", '{"force": 270, "mm": 8.7, "at": "2026-03-02T06:00:10Z"}'))
        wait_for(lambda: len(live_events(peer)) == 3, what="the next signal")
        assert live_events(peer)[2]["data"]["point"]["number"] == 2
        service.stop()


def hang_up(service: Service, done: Callable[[], object], what: str) -> None:
    """Send SIGHUP and wait for what it does."""
    assert service.process is not None
    service.process.send_signal(signal.SIGHUP)
    wait_for(done, what=what)


def said(peer: Peer) -> list[tuple[str, int]]:
    """Return kind and point's number of all events."""
    return [(event["type"].rsplit(".", 1)[1], event["data"]["point"]["number"]) for event in live_events(peer)]


def test_a_reload_keeps_what_is_judged_alike_and_follows_the_rest(tmp_path: Path) -> None:
    press = '{"force": %s, "mm": 8.7, "at": "2026-03-02T06:00:%02dZ"}'
    with contextlib.ExitStack() as stack:
        broker = stack.enter_context(running(tmp_path))
        peer = stack.enter_context(Peer(broker.port, "quietmill/#"))
        with service_with_record(tmp_path, broker) as service:
            peer.publish(("tiles/press/1", press % (260, 1)))
            peer.publish(("tiles/kiln/1", '{"samples": [{"t": 1145, "at": "2026-03-02T06:00:00Z"}]}'))
            wait_for(lambda: service.accepted() == 3, what="three readings")
            text = service.config.read_text().replace("tiles/kiln/1", "tiles/kiln/9").replace("unit: mm", "unit: um")
            text = text.replace("cusum: {k: 0.5, h: 5}", "cusum: {k: 0.5, h: 6}")
            service.config.write_text(text)
            hang_up(service, lambda: any(b'"reload"' in body for body in peer.payloads("quietmill/signals")), "the end")
            peer.publish(("tiles/press/1", press % (262, 2)))
            peer.publish(("tiles/kiln/1", '{"samples": [{"t": 1145, "at": "2026-03-02T06:00:10Z"}]}'))
            peer.publish(("tiles/kiln/9", '{"samples": [{"t": 1146, "at": "2026-03-02T06:00:10Z"}]}'))
            wait_for(lambda: service.accepted() == 6, what="the readings under the new settings")
            wait_for(lambda: [number for kind, number in said(peer) if kind == "raised"] == [1, 2], what="the signals")
            assert service.metric('quietmill_signals_total{characteristic="press1.force",rule="beyond_limits"}') == 2
            assert service.metric("quietmill_config_last_reload_successful") == 1
            assert service.stop() == 0
        record = Record(tmp_path / "quietmill.db", PLANT)
        assert record.number == record.judged
        record.close()


@pytest.mark.parametrize(
    ("old", "new", "reason"),
    [
        ("sigma: 2", "sigma: -2", "must be greater than 0, is -2"),
        ("client_id: quietmill", "client_id: other", "broker changed, which needs a restart of the service"),
        ("record: sqlite:quietmill.db", "record: sqlite:other.db", "record changed, which needs a restart"),
    ],
)
def test_a_reload_that_cannot_be_leaves_the_old_settings_at_work(
    tmp_path: Path, old: str, new: str, reason: str
) -> None:
    with running(tmp_path) as broker, Peer(broker.port) as peer, service_with_record(tmp_path, broker) as service:
        service.config.write_text(service.config.read_text().replace(old, new))
        hang_up(service, lambda: service.metric("quietmill_config_last_reload_successful") == 0, "the refusal")
        assert reason in service.log_file.read_text()
        peer.publish(("tiles/press/1", '{"force": 240, "mm": 8.7, "at": "2026-03-02T06:00:00Z"}'))
        wait_for(lambda: service.accepted() == 2, what="readings under the old settings")


def test_the_status_of_a_characteristic_that_is_gone_is_cleared(tmp_path: Path) -> None:
    with running(tmp_path) as broker, service_with_record(tmp_path, broker) as service:
        text = service.config.read_text()
        service.config.write_text(text[: text.index(",\n  {id: kiln1.zone1")] + "]\nrecord: sqlite:quietmill.db\n")
        with Peer(broker.port, "quietmill/status/+") as peer:
            wait_for(lambda: len(peer.received) >= 3, what="all status")
            cleared = ("quietmill/status/kiln1.zone1", b"", False)
            hang_up(service, lambda: cleared in peer.received, "the status to be cleared")
        with Peer(broker.port, "quietmill/status/+", name="late") as late:
            wait_for(lambda: len(late.received) >= 2, what="the status that is left")
            assert {topic for topic, _, _ in late.received} == {
                "quietmill/status/press1.force",
                "quietmill/status/press1.thickness",
            }
