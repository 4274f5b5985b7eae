"""Replay beside `csv.reader` only reading the same file: `python tests/benchmarks/bench_replay.py`.

A million rows of a hundred characteristics. The target: at least 0.5 of the reader's rows per second with pyarrow, 0.15
without.
"""

import csv
import random
from datetime import UTC, datetime, timedelta
from pathlib import Path
from tempfile import TemporaryDirectory
from time import perf_counter

from machine import machine, paired

from quietmill.settings import Settings, load
from quietmill.study import arrow
from quietmill.study.replay import replay

ROWS = 1_000_000
PLANT = """
characteristics:
  - family: press{n}.force
    each: {n: [%s]}
    topic: tiles/press/{n}
    payload: {value: /force, time: /at}
    baseline: {centre: 240, sigma: 2}
"""


def write_history(path: Path) -> None:
    stream, begin = random.Random(1), datetime(2026, 3, 2, tzinfo=UTC)
    with path.open("w") as file:
        file.write("time,characteristic,value\n")
        for step in range(ROWS):
            at = (begin + timedelta(milliseconds=250 * step)).isoformat(timespec="milliseconds").replace("+00:00", "Z")
            file.write(f"{at},press{step % 100}.force,{stream.gauss(240, 2):.3f}\n")


def replay_rate(settings: Settings, path: Path) -> float:
    return ROWS / replay(settings, [path]).seconds


def reader_rate(path: Path) -> float:
    begin = perf_counter()
    with path.open(newline="") as file:
        for _ in csv.reader(file):
            pass
    return ROWS / (perf_counter() - begin)


def main() -> None:
    with TemporaryDirectory() as folder:
        config, history = Path(folder) / "plant.yaml", Path(folder) / "history.csv"
        config.write_text(PLANT % ", ".join(map(str, range(100))))
        write_history(history)
        settings = load(config)
        replay(settings, [history])  # compiles
        print(machine())
        print(f"{'':<18} {'replay/s':>12} {'csv.reader/s':>14} {'ratio':>7}")
        for name, module in (("with pyarrow", arrow.pa), ("without", None)):
            arrow.pa = module
            ours, theirs, ratio = paired(lambda: replay_rate(settings, history), lambda: reader_rate(history))
            print(f"{name:<18} {ours:>12,.0f} {theirs:>14,.0f} {ratio:>7.2f}")


if __name__ == "__main__":
    main()
