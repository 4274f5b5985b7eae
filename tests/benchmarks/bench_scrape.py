"""A scrape of 10,000 characteristics, and batches while it goes on: `python tests/benchmarks/bench_scrape.py`.

The service runs in a process of its own on a real Mosquitto. The target: a scrape in less than half a second, and 99 of
100 batches of one message decided within 10 ms while scrapes go on one after another.
"""

import contextlib
import json
import statistics
import sys
import threading
import time
from pathlib import Path
from tempfile import TemporaryDirectory

sys.path.insert(0, str(Path(__file__).parents[1]))

from machine import machine

from broker import Peer, running, wait_for
from service import Service

ROWS = 10_000
PROBES = 400
CHARACTERISTICS = f"""[{{
  family: 'press{{n}}.force', each: {{n: {list(range(ROWS))}}}, topic: 'tiles/press/{{n}}',
  baseline: {{centre: 240, sigma: 2}}, rules: [beyond_limits],
  ewma: {{lambda: 0.1, L: 2.814}}, cusum: {{k: 0.5, h: 5}}}}]"""


def decisions(service: Service) -> tuple[list[float], list[int]]:
    """Return bounds and cumulative counts of the histogram of decisions."""
    bounds, counts = [], []
    for line in service.get("/metrics")[1].splitlines():
        if line.startswith("quietmill_decision_seconds_bucket"):
            bounds.append(float(line.split('le="')[1].split('"')[0]))
            counts.append(int(float(line.rsplit(" ", 1)[1])))
    return bounds, counts


def quantile(before: tuple[list[float], list[int]], after: tuple[list[float], list[int]], share: float) -> float:
    """Return the bound below which a share of the decisions between two looks were made."""
    made = [b - a for a, b in zip(before[1], after[1], strict=True)]
    return next(bound for bound, count in zip(after[0], made, strict=True) if count >= share * made[-1])


def probe(peer: Peer) -> None:
    for step in range(PROBES):
        peer.publish((f"tiles/press/{step * 7 % ROWS}", "240.5"))
        time.sleep(0.005)


def main() -> None:
    with contextlib.ExitStack() as stack:
        folder = Path(stack.enter_context(TemporaryDirectory()))
        broker = stack.enter_context(running(folder))
        peer = stack.enter_context(Peer(broker.port))
        with Service.of(folder, broker.url, CHARACTERISTICS) as service:
            peer.publish(*((f"tiles/press/{row}", "240.1") for row in range(ROWS)))
            wait_for(lambda: service.accepted() >= ROWS, what="a point everywhere")
            times = []
            for _ in range(7):
                begin = time.perf_counter()
                text = service.get("/metrics")[1]
                times.append(time.perf_counter() - begin)
            idle_before = decisions(service)
            probe(peer)
            busy_before = decisions(service)
            done = threading.Event()
            scrapes = [0]

            def scrape() -> None:
                while not done.is_set():
                    service.get("/metrics")
                    scrapes[0] += 1

            thread = threading.Thread(target=scrape)
            thread.start()
            probe(peer)
            done.set()
            thread.join()
            after = decisions(service)
    print(machine())
    series = sum(not line.startswith("#") for line in text.splitlines())
    print(f"a scrape of {ROWS:,} characteristics, {series:,} series: {statistics.median(times):.3f} s (median of 7)")
    for label, first, last in (
        ("idle", idle_before, busy_before),
        (f"during {scrapes[0]} scrapes", busy_before, after),
    ):
        found = {f"p{share * 100:g}": quantile(first, last, share) * 1000 for share in (0.5, 0.99)}
        print(f"from arrival to decision, {label}: at most " + json.dumps(found) + " ms")


if __name__ == "__main__":
    main()
