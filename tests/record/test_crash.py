"""Killed at any instant, the service ends in the state, bit for bit, and with the events of an undisturbed run."""

import json
import random
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from broker import Mosquitto, Peer, running, wait_for
from quietmill.intake.message import Message
from quietmill.intake.routes import Routes
from quietmill.judging import Judging
from quietmill.record.record import Record
from quietmill.settings import load
from service import Service
from test_end_to_end import CHARACTERISTICS, by_characteristic, live_events, messages, readings, replayed

pytestmark = pytest.mark.broker

VICTIM = Path(__file__).parent / "victim.py"
STEPS = ["decoded", "journaled", "acknowledged", "judged", "said"]
PLANT = {"source": "quietmill", "prefix": "quietmill"}


def service_with_record(folder: Path, broker: Mosquitto, version: str = "5") -> Service:
    service = Service.of(folder, broker.url, CHARACTERISTICS, f", version: {version}")
    service.config.write_text(service.config.read_text() + "record: sqlite:quietmill.db\n")
    return service


def die(service: Service, step: str, count: int, patience: float = 5) -> None:
    """Run the service until it kills itself at a step; or kill it when the step does not come."""
    with service.log_file.open("ab") as log:
        process = subprocess.Popen(
            [sys.executable, str(VICTIM), str(service.config), step, str(count)], stdout=log, stderr=log
        )
    try:
        process.wait(patience)
    except subprocess.TimeoutExpired:
        process.kill()
        process.wait()


def state_of(service: Service) -> tuple[bytes, bytes]:
    """Return the arrays that a stopped service left in its record."""
    record = Record(service.config.with_name("quietmill.db"), PLANT)
    try:
        found = record.snapshot()
        assert found is not None
        assert list(record.entries(found[0])) == []
        return found[1].state, found[1].pool
    finally:
        record.close()


def undisturbed(service: Service, sent: list[tuple[str, str]]) -> tuple[bytes, bytes]:
    """Return the arrays after all messages were judged once, without interruption."""
    characteristics = load(service.config).characteristics
    batch = [Message(topic, payload.encode(), 1, False, False, 0, 2 * 10**15, 1) for topic, payload in sent]
    judging = Judging(characteristics, "quietmill")
    judging.judge(Routes(characteristics).decode(batch, 0).readings)
    return judging.bank.state.tobytes(), judging.bank.pool.tobytes()


def hold_together(service: Service, peer: Peer, rows: list, folder: Path, sent: list[tuple[str, str]]) -> None:
    """Let the service finish in peace; compare what it said and where it stands with an undisturbed run."""
    expected = replayed(service, rows, folder)
    service.start()
    wait_for(
        lambda: {event["id"] for event in live_events(peer)} >= {event["id"] for event in expected}, what="all events"
    )
    wait_for(lambda: service.metric("quietmill_outbox_events") == 0, what="the outbox to empty")
    time.sleep(0.3)
    assert service.stop() == 0
    bodies: dict[str, set[bytes]] = {}
    for payload in peer.payloads("quietmill/signals/"):
        bodies.setdefault(json.loads(payload)["id"], set()).add(payload)
    assert all(len(same) == 1 for same in bodies.values())
    once = {event["id"]: event for event in live_events(peer)}
    assert by_characteristic(list(once.values())) == by_characteristic(expected)
    state, pool = state_of(service)
    wanted_state, wanted_pool = undisturbed(service, sent)
    judged = Judging(load(service.config).characteristics, "quietmill").bank.state.dtype
    ours, theirs = np.frombuffer(state, judged), np.frombuffer(wanted_state, judged)
    for name in judged.names:
        assert ours[name].tobytes() == theirs[name].tobytes(), name
    assert pool == wanted_pool


@pytest.mark.parametrize("version", ["5", "3.1.1"])
@pytest.mark.parametrize("step", STEPS)
def test_killed_at_each_step(tmp_path: Path, step: str, version: str) -> None:
    rows = readings(300, seed=STEPS.index(step))
    sent = messages(rows)
    with running(tmp_path) as broker, Peer(broker.port, "quietmill/#") as peer:
        service = service_with_record(tmp_path, broker, version)
        service.start()  # subscribes
        service.stop()
        for part in range(3):
            peer.publish(*sent[len(sent) * part // 3 : len(sent) * (part + 1) // 3])
            die(service, step, 1)
        hold_together(service, peer, rows, tmp_path, sent)


def test_killed_at_random_instants(tmp_path: Path) -> None:
    kills, chance = 8, random.Random(7)
    rows = readings(200 * kills, seed=11)
    sent = messages(rows)
    with running(tmp_path) as broker, Peer(broker.port, "quietmill/#") as peer:
        service = service_with_record(tmp_path, broker)
        service.start()
        service.stop()
        part = len(sent) // kills + 1
        for place in range(0, len(sent), part):
            service.start(ready=False)
            wait_for(lambda: service.get("/readyz")[0] == 200, what="the service")
            for message in sent[place : place + part]:
                peer.publish(message) if chance.random() < 0.02 else peer.client.publish(*message, 1)
            time.sleep(chance.random() * 0.3)
            service.kill()
        wait_for(lambda: not peer.client._out_messages, what="the publisher")
        hold_together(service, peer, rows, tmp_path, sent)
