"""The service beside a bare paho subscriber: `python tests/benchmarks/bench_service.py`.

Both drain the same queue of a persistent session on a real Mosquitto, MQTT 5 and QoS 1, in a process of their own, from
the first message to the acknowledgement of the last; the bare subscriber does nothing with a message. The target: at
least 0.9 of its messages per second, with a record (every batch committed before it is acknowledged) as without.
"""

import subprocess
import sys
import time
from pathlib import Path
from tempfile import TemporaryDirectory

sys.path.insert(0, str(Path(__file__).parents[1]))

import paho.mqtt.client as mqtt
from machine import machine, paired
from paho.mqtt.enums import CallbackAPIVersion
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties

from broker import Mosquitto, Peer

MESSAGES = 20_000
ROWS = 1000
PLANT = """
broker: {{url: '{url}', client_id: {name}}}
web: {{listen: '127.0.0.1:0'}}
characteristics:
  - family: press{{n}}.force
    each: {{n: [{rows}]}}
    topic: tiles/press/{{n}}
    payload: {{value: /force, time: /at}}
    baseline: {{centre: 240, sigma: 2}}
"""


def bare(port: str) -> None:
    """Drain the queue with a bare subscriber; print messages per second."""
    count, begin = 0, 0.0

    def message(client: mqtt.Client, *_: object) -> None:
        nonlocal count, begin
        count += 1
        if count == 1:
            begin = time.perf_counter()
        if count == MESSAGES:
            print(MESSAGES / (time.perf_counter() - begin), flush=True)
            client.disconnect()

    client = mqtt.Client(CallbackAPIVersion.VERSION2, client_id="bare", protocol=mqtt.MQTTv5)
    client.on_message = message
    client.connect("127.0.0.1", int(port), clean_start=False, properties=lasting())
    client.loop_forever()


def ours(config: str) -> None:
    """Drain the queue with the service's own loop; print messages per second."""
    from quietmill.monitor import Monitor
    from quietmill.settings import load

    monitor = Monitor(load(Path(config)))
    monitor.start()
    begin = 0.0
    while (judged := int(monitor.tally.outcomes.sum())) < MESSAGES:
        monitor.turn()
        if not judged and monitor.tally.outcomes.sum():
            begin = time.perf_counter()
    rate = MESSAGES / (time.perf_counter() - begin)
    monitor.close()
    print(rate, flush=True)


def lasting() -> Properties:
    properties = Properties(PacketTypes.CONNECT)
    properties.SessionExpiryInterval = 3600
    return properties


def subscribe(port: int, name: str) -> None:
    """Leave a session behind that subscribes to every topic."""
    client = mqtt.Client(CallbackAPIVersion.VERSION2, client_id=name, protocol=mqtt.MQTTv5)
    done: list[int] = []
    client.on_subscribe = lambda *_: done.append(1)
    client.connect("127.0.0.1", port, clean_start=False, properties=lasting())
    client.loop_start()
    for begin in range(0, ROWS, 100):
        client.subscribe([(f"tiles/press/{row}", 1) for row in range(begin, begin + 100)])
    while len(done) < ROWS // 100:
        time.sleep(0.01)
    client.disconnect()
    client.loop_stop()


def fill(port: int, start: int) -> None:
    """Queue messages for the session; times rise, so that none is late."""
    with Peer(port, name="sender") as peer:
        for begin in range(0, MESSAGES, 1000):
            peer.publish(
                *(
                    (f"tiles/press/{step * 7 % ROWS}", f'{{"force": {239 + step % 3}, "at": {start + step}}}')
                    for step in range(begin, begin + 1000)
                )
            )


def measured(kind: str, target: str, port: int, start: int) -> float:
    fill(port, start)
    done = subprocess.run(
        [sys.executable, __file__, kind, target], capture_output=True, text=True, check=True, timeout=300
    )
    return float(done.stdout.split()[-1])


def main() -> None:
    with TemporaryDirectory() as name:
        folder = Path(name)
        broker = Mosquitto(folder).start()
        rows = ", ".join(map(str, range(ROWS)))
        plain, recorded = folder / "plain.yaml", folder / "recorded.yaml"
        plain.write_text(PLANT.format(url=broker.url, name="service", rows=rows))
        recorded.write_text(plain.read_text() + "record: sqlite:quietmill.db\n")
        clock = iter(range(1_700_000_000, 2_000_000_000, 2 * MESSAGES))

        def rate(kind: str, session: str, target: object) -> float:
            """Measure with a session of its own, so that nobody pays for another's queue."""
            subscribe(broker.port, session)
            found = measured(kind, str(target), broker.port, next(clock))
            forget(broker.port, session)
            return found

        print(machine())
        print(f"{MESSAGES:,} messages on {ROWS:,} topics, medians of 5 runs by turns")
        for label, config in (("service without a record", plain), ("service with its record", recorded)):
            found = paired(
                lambda config=config: rate("ours", "service", config), lambda: rate("bare", "bare", broker.port)
            )
            print(f"{label} {found[0]:,.0f}/s, bare subscriber {found[1]:,.0f}/s, ratio {found[2]:.2f}")
        broker.stop()


def forget(port: int, name: str) -> None:
    """End a session."""
    client = mqtt.Client(CallbackAPIVersion.VERSION2, client_id=name, protocol=mqtt.MQTTv5)
    client.connect("127.0.0.1", port, clean_start=True)
    client.loop_start()
    time.sleep(0.2)
    client.disconnect()
    client.loop_stop()


if __name__ == "__main__":
    if len(sys.argv) == 3:
        {"bare": bare, "ours": ours}[sys.argv[1]](sys.argv[2])
    else:
        main()
