"""What Prometheus scrapes, written from copies of the arrays at the moment of the scrape.

Series of characteristics are rendered directly: 80,000 of them through a library's objects take longer than all else
that the service does. Process-wide ones go through `prometheus_client`.
"""

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from math import inf, isnan
from typing import Final

import numpy as np
from numpy.lib.recfunctions import repack_fields
from numpy.typing import NDArray
from prometheus_client import CollectorRegistry
from prometheus_client.core import CounterMetricFamily, GaugeMetricFamily, HistogramMetricFamily, Metric
from prometheus_client.exposition import generate_latest
from prometheus_client.registry import Collector

from quietmill import __version__
from quietmill.model import Detector, Outcome, Records, Rule
from quietmill.settings import Characteristic

__all__ = ["CONTENT_TYPE", "Copies", "Histogram", "Tally", "Writer", "shown"]

CONTENT_TYPE: Final = "text/plain; version=0.0.4; charset=utf-8"

SECONDS: Final = (0.0005, 0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0)
SIZES: Final = (1, 2, 5, 10, 20, 50, 100, 200, 500, 1000, 2000, 5000)


class Histogram:
    """Counts observations by upper bounds, many at a time."""

    def __init__(self, bounds: Sequence[float] | NDArray[np.float64]) -> None:
        self.bounds = np.array(bounds, np.float64)
        self.counts = np.zeros(len(self.bounds) + 1, np.int64)
        self.sum = 0.0

    def observe(self, values: NDArray[np.float64]) -> None:
        """Add observations, shape (n,); those below 0, when the clock was set back, count as 0: sums never fall."""
        values = np.maximum(values, 0.0)
        places = np.searchsorted(self.bounds, values)
        self.counts += np.bincount(places, minlength=len(self.counts))
        self.sum += float(values.sum())

    def copy(self) -> "Histogram":
        """Return what another thread may read."""
        twin = Histogram(self.bounds)
        twin.counts, twin.sum = self.counts.copy(), self.sum
        return twin

    def family(self, name: str, documentation: str) -> HistogramMetricFamily:
        """Return the histogram as the registry wants it."""
        totals = np.cumsum(self.counts).tolist()
        bounds = [*(f"{bound:g}" for bound in self.bounds), "+Inf"]
        return HistogramMetricFamily(name, documentation, list(zip(bounds, totals, strict=True)), self.sum)


@dataclass(slots=True)
class Tally:
    """What the process has counted since it started. Written by the loop alone."""

    rows: int
    outcomes: NDArray[np.int64] = field(default_factory=lambda: np.zeros(len(Outcome), np.int64))
    signals: NDArray[np.int64] = field(init=False)
    """By row and rule, shape (rows, rules): once when a rule starts or joins an episode."""
    decision: Histogram = field(default_factory=lambda: Histogram(SECONDS))
    batch: Histogram = field(default_factory=lambda: Histogram(SIZES))
    messages_qos0: int = 0

    def __post_init__(self) -> None:
        self.signals = np.zeros((self.rows, len(Rule)), np.int64)


@dataclass(frozen=True, slots=True)
class Copies:
    """What one scrape shows, copied between two batches so that the web thread never reads what the loop writes.

    `rows` and `state` (at least its fields `SHOWN`) are those of the bank, an element a characteristic.
    """

    rows: Records
    state: Records
    signals: NDArray[np.int64]
    outcomes: NDArray[np.int64]
    decision: Histogram
    batch: Histogram
    messages_qos0: int
    connected: bool
    outbox: int
    record_bytes: int = 0
    reloaded: bool = True


SHOWN: Final[tuple[str, ...]] = ("number", "value", "ewma", "cusum_high", "cusum_low", "open", "accepted", "last_time")
"""What a scrape shows of the bank's state."""


def shown(state: Records) -> Records:
    """Return a copy of what a scrape shows of the bank's state: a sixth of the time that all of it would take."""
    fields: list[str] = [*SHOWN]
    return repack_fields(state[fields])


class ServiceCollector(Collector):
    """The process-wide metrics of one scrape."""

    def __init__(self, copies: Copies) -> None:
        self._copies = copies

    def collect(self) -> Iterator[Metric]:
        """Yield the families in the order in which they are written."""
        copies = self._copies
        build = GaugeMetricFamily("quietmill_build_info", "The version that runs.", labels=["version"])
        build.add_metric([__version__], 1)
        yield build
        readings = CounterMetricFamily("quietmill_readings", "Readings by what became of them.", labels=["outcome"])
        for outcome in Outcome:
            readings.add_metric([outcome.label], int(copies.outcomes[outcome]))
        yield readings
        text = "Messages received with QoS 0, which a broker does not keep for a service that is away."
        yield CounterMetricFamily("quietmill_messages_qos0", text, copies.messages_qos0)
        text = "From a message's arrival to the decision on its readings."
        yield copies.decision.family("quietmill_decision_seconds", text)
        yield copies.batch.family("quietmill_batch_readings", "Readings judged in one go.")
        text = "Whether the session at the broker stands."
        yield GaugeMetricFamily("quietmill_broker_connected", text, int(copies.connected))
        text = "Events, replies and status that the broker has not acknowledged yet."
        yield GaugeMetricFamily("quietmill_outbox_events", text, copies.outbox)
        text = "Size of the record's file with its write-ahead log; 0 without a record."
        yield GaugeMetricFamily("quietmill_journal_bytes", text, copies.record_bytes)
        text = "Whether the settings were taken over when they were last read."
        yield GaugeMetricFamily("quietmill_config_last_reload_successful", text, int(copies.reloaded))


def escaped(text: str) -> str:
    """Return a label's value as the exposition format wants it."""
    return text.replace("\\", r"\\").replace("\n", r"\n").replace('"', r"\"")


def number(value: float) -> str:
    """Return a sample's value as the exposition format wants it."""
    if isnan(value):
        return "NaN"
    return repr(value) if abs(value) != inf else ("+Inf" if value > 0 else "-Inf")


class Writer:
    """Writes the exposition text of a plant; what does not change from scrape to scrape is prepared once."""

    def __init__(self, characteristics: Sequence[Characteristic]) -> None:
        detectors = [characteristic.detector for characteristic in characteristics]
        self._names = [f'{{characteristic="{escaped(characteristic.id)}"' for characteristic in characteristics]
        self._all = range(len(detectors))
        self._ewma = [row for row, detector in enumerate(detectors) if detector.ewma is not None]
        self._cusum = [row for row, detector in enumerate(detectors) if detector.cusum is not None]
        used = [(row, rule) for row, detector in enumerate(detectors) for rule in rules_of(detector)]
        self._counted = [f'{self._names[row]},rule="{rule.label}"}}' for row, rule in used]
        self._counted_rows = np.array([row for row, _ in used], np.int64)
        self._counted_rules = np.array([rule for _, rule in used], np.int64)

    def write(self, copies: Copies) -> bytes:
        """Return the whole exposition."""
        registry = CollectorRegistry(auto_describe=False)
        registry.register(ServiceCollector(copies))
        # Family by family, so that no single step keeps the loop from the interpreter for long.
        return b"".join([generate_latest(registry), *self._of_characteristics(copies)])

    def _of_characteristics(self, copies: Copies) -> Iterator[bytes]:
        rows, state = copies.rows, copies.state
        centre, sigma, width = rows["centre"], rows["sigma"], rows["width"]
        yield self._gauge("point_value", "The last point's value.", self._all, ("", state["value"]))
        yield self._gauge("point_centre", "The centre of the control limits.", self._all, ("", centre))
        lower, upper = centre - width * sigma, centre + width * sigma
        limits = ((',side="lower"', lower), (',side="upper"', upper))
        yield self._gauge("point_limit", "The control limits.", self._all, *limits)
        ewma = np.where(state["number"] > 0, centre + state["ewma"] * sigma, np.nan)
        yield self._gauge("point_ewma", "The moving average.", self._ewma, ("", ewma))
        sums = ((',side="high"', state["cusum_high"]), (',side="low"', state["cusum_low"]))
        yield self._gauge("point_cusum", "The cumulative sums, in sigmas of the point.", self._cusum, *sums)
        yield self._gauge("signal_open", "Whether a signal is open.", self._all, ("", state["open"] != 0))
        last = np.where(state["accepted"] > 0, state["last_time"] / 1e6, np.nan)
        text = "Time of the last accepted reading."
        yield self._gauge("last_reading_timestamp_seconds", text, self._all, ("", last))
        counts = copies.signals[self._counted_rows, self._counted_rules].tolist()
        name = "quietmill_signals_total"
        lines = (f"{name}{labels} {count}\n" for labels, count in zip(self._counted, counts, strict=True))
        yield family(name, "Rules that started or joined an episode.", "counter", lines)

    def _gauge(self, name: str, text: str, rows: Sequence[int], *columns: tuple[str, NDArray[np.generic]]) -> bytes:
        """Return a family of gauges: of each of `rows` a sample from every column, with the column's further label."""
        name, names = f"quietmill_{name}", self._names
        samples = ((label, values.astype(np.float64).tolist()) for label, values in columns)
        lines = (f"{name}{names[row]}{label}}} {number(listed[row])}\n" for label, listed in samples for row in rows)
        return family(name, text, "gauge", lines)


def rules_of(detector: Detector) -> Iterator[Rule]:
    """Yield the rules by which a detector may signal, in the order of the table."""
    yield from sorted(detector.rules)
    if detector.ewma is not None:
        yield Rule.EWMA
    if detector.cusum is not None:
        yield Rule.CUSUM
    if detector.spread_signals:
        yield Rule.SPREAD


def family(name: str, text: str, kind: str, lines: Iterable[str]) -> bytes:
    """Return a family's samples below what says of which kind they are."""
    return f"# HELP {name} {text}\n# TYPE {name} {kind}\n{''.join(lines)}".encode()
