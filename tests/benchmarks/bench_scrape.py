"""A scrape of 10,000 characteristics, and what the loop feels of it: `python tests/benchmarks/bench_scrape.py`.

A loop judges batches as they would come at 20,000 readings a second, with copies handed over between them; over HTTP
the metrics are scraped without a pause. The target: a scrape under 0.5 s, and 99 of 100 batches done within 10 ms.
"""

import sys
import threading
import time
import urllib.request
from collections.abc import Callable
from functools import partial
from statistics import median

import numpy as np
from machine import machine

from quietmill.charts.bank import Bank
from quietmill.model import READING
from quietmill.outlets.metrics import Copies, Tally, Writer, shown
from quietmill.outlets.web import Handover, Health, WebServer
from quietmill.settings import Baseline, Characteristic

ROWS = 10_000
BATCH = 200
PACE_SECONDS = 0.01
SECONDS = 5.0
SWITCH_SECONDS = 0.0005  # as the service sets it
RULES = [{"beyond_limits": 4}, "same_side"]
SLOW = {"ewma": {"lambda": 0.1, "L": 2.814}, "cusum": {"k": 0.5, "h": 8.0, "ceiling": 2.0}}


class Plant:
    """Many presses, and the loop that judges them."""

    def __init__(self) -> None:
        press = {"topic": "tiles/press", "baseline": Baseline(centre=240.0, sigma=2.0), "rules": RULES, **SLOW}
        characteristics = [Characteristic.model_validate({"id": f"press{n}.force", **press}) for n in range(ROWS)]
        self.bank = Bank([characteristic.detector for characteristic in characteristics])
        self.tally = Tally(ROWS)
        self.handover = Handover(lambda: None)
        self.stream = np.random.default_rng(7)
        self.messages = 0
        self.writer = Writer(characteristics)
        self.web = WebServer("127.0.0.1", 0, self.handover, Health())

    def exposition(self) -> Callable[[], bytes]:
        tally = self.tally
        arrays = (tally.signals.copy(), tally.outcomes.copy(), tally.decision.copy(), tally.batch.copy())
        return partial(self.writer.write, Copies(self.bank.rows, shown(self.bank.state), *arrays, 0, True, 0))

    def batch(self) -> None:
        readings = np.zeros(BATCH, READING)
        readings["row"] = self.stream.integers(0, ROWS, BATCH)
        readings["time"] = readings["arrival"] = readings["message"] = self.messages + np.arange(BATCH)
        readings["value"] = self.stream.normal(240, 2, BATCH)
        self.messages += BATCH
        verdicts = self.bank.judge(readings)
        self.tally.outcomes += np.bincount(verdicts.outcomes, minlength=len(self.tally.outcomes))
        self.handover.serve(self.exposition)

    def turn(self, seconds: float) -> np.ndarray:
        """Judge a batch at each stroke of the pace; return by how much each was done later than its stroke, in ms."""
        late: list[float] = []
        due = time.perf_counter()
        for _ in range(int(seconds / PACE_SECONDS)):
            due = max(due + PACE_SECONDS, time.perf_counter())
            time.sleep(max(0.0, due - time.perf_counter()))
            self.batch()
            late.append(time.perf_counter() - due)
        return np.array(late) * 1e3


def main() -> None:
    print(machine())
    sys.setswitchinterval(SWITCH_SECONDS)
    plant = Plant()
    plant.web.start()
    host, port = plant.web.address
    plant.turn(0.5)
    taken: list[float] = []
    size = 0
    over = threading.Event()

    def scrape() -> None:
        nonlocal size
        while not over.is_set():
            begin = time.perf_counter()
            with urllib.request.urlopen(f"http://{host}:{port}/metrics", timeout=30) as answer:
                size = len(answer.read())
            taken.append(time.perf_counter() - begin)

    idle = plant.turn(SECONDS)
    scraper = threading.Thread(target=scrape)
    scraper.start()
    busy = plant.turn(SECONDS)
    over.set()
    while scraper.is_alive():
        plant.batch()
    plant.web.stop()
    print(f"scrape of {ROWS:,}: median {median(taken):.3f} s, longest {max(taken):.3f} s, {size / 1e6:.1f} MB")
    for name, batches in (("idle", idle), ("scraped without a pause", busy)):
        half, most = np.quantile(batches, (0.5, 0.99))
        print(f"a batch of {BATCH}, {name}: median {half:.2f} ms, p99 {most:.2f} ms, longest {batches.max():.2f} ms")


if __name__ == "__main__":
    main()
