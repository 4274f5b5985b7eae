"""What Prometheus scrapes, written from copies of the arrays at the moment of the scrape.

Series of characteristics are rendered directly: 80,000 of them through a library's objects take longer than all else
that the service does. Process-wide ones go through `prometheus_client`.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from math import inf, isnan
from typing import Final

import numpy as np
from numpy.typing import NDArray
from prometheus_client import CollectorRegistry
from prometheus_client.core import CounterMetricFamily, GaugeMetricFamily, HistogramMetricFamily, Metric
from prometheus_client.exposition import CONTENT_TYPE_PLAIN_0_0_4, generate_latest
from prometheus_client.registry import Collector

from quietmill import __version__
from quietmill.model import Outcome, Records, Rule
from quietmill.settings import Characteristic

__all__ = ["CONTENT_TYPE", "Copies", "Histogram", "Tally", "Writer"]

CONTENT_TYPE: Final = CONTENT_TYPE_PLAIN_0_0_4

SECONDS: Final = (0.0005, 0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0)
SIZES: Final = (1, 2, 5, 10, 20, 50, 100, 200, 500, 1000, 2000, 5000)


class Histogram:
    """Counts observations by upper bounds, many at a time."""

    def __init__(self, bounds: Sequence[float]) -> None:
        self.bounds = np.array(bounds, np.float64)
        self.counts = np.zeros(len(bounds) + 1, np.int64)
        self.sum = 0.0

    def observe(self, values: NDArray[np.float64]) -> None:
        """Add observations, shape (n,)."""
        places = np.searchsorted(self.bounds, values)
        self.counts += np.bincount(places, minlength=len(self.counts))
        self.sum += float(values.sum())

    def copy(self) -> "Histogram":
        """Return what another thread may read."""
        twin = Histogram(())
        twin.bounds, twin.counts, twin.sum = self.bounds, self.counts.copy(), self.sum
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

    `rows` and `state` are those of the bank (`charts.layout`), an element a characteristic.
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


class ProcessCollector(Collector):
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
        text = "Whether the settings were taken over when they were last read."
        yield GaugeMetricFamily("quietmill_config_last_reload_successful", text, 1)


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
        names = [f'{{characteristic="{escaped(characteristic.id)}"' for characteristic in characteristics]
        detectors = [characteristic.detector for characteristic in characteristics]
        self._all = list(range(len(names)))
        self._ewma = [row for row, detector in enumerate(detectors) if detector.ewma is not None]
        self._cusum = [row for row, detector in enumerate(detectors) if detector.cusum is not None]
        self._names = names
        self._rules: list[tuple[int, Rule, str]] = []
        for row, detector in enumerate(detectors):
            used = [*sorted(detector.rules)]
            used += [Rule.EWMA] * (detector.ewma is not None) + [Rule.CUSUM] * (detector.cusum is not None)
            used += [Rule.SPREAD] * detector.spread_signals
            self._rules += [(row, rule, f'{names[row]},rule="{rule.label}"}} ') for rule in used]

    def write(self, copies: Copies) -> bytes:
        """Return the whole exposition."""
        registry = CollectorRegistry(auto_describe=False)
        registry.register(ProcessCollector(copies))
        return generate_latest(registry) + "".join(self._of_characteristics(copies)).encode()

    def _of_characteristics(self, copies: Copies) -> Iterator[str]:
        rows, state = copies.rows, copies.state
        seen = state["number"] > 0
        centre, sigma, width = rows["centre"], rows["sigma"], rows["width"]
        lasts = np.where(state["accepted"] > 0, state["last_time"] / 1e6, np.nan)
        yield from self._family("point_value", "The last point's value.", self._all, [("", state["value"])])
        yield from self._family("point_centre", "The centre of the control limits.", self._all, [("", centre)])
        limits = [(',side="lower"', centre - width * sigma), (',side="upper"', centre + width * sigma)]
        yield from self._family("point_limit", "The control limits.", self._all, limits)
        ewma = [("", np.where(seen, centre + state["ewma"] * sigma, np.nan))]
        yield from self._family("point_ewma", "The moving average.", self._ewma, ewma)
        sums = [(',side="high"', state["cusum_high"]), (',side="low"', state["cusum_low"])]
        yield from self._family("point_cusum", "The cumulative sums, in sigmas of the point.", self._cusum, sums)
        signal_open = [("", state["open"].astype(np.float64))]
        yield from self._family("signal_open", "Whether a signal is open.", self._all, signal_open)
        text = "Time of the last accepted reading."
        yield from self._family("last_reading_timestamp_seconds", text, self._all, [("", lasts)])
        yield "# HELP quietmill_signals_total Rules that started or joined an episode.\n"
        yield "# TYPE quietmill_signals_total counter\n"
        signals = copies.signals.tolist()
        for row, rule, labels in self._rules:
            yield f"quietmill_signals_total{labels}{signals[row][rule]}\n"

    def _family(
        self, name: str, text: str, rows: Sequence[int], columns: Sequence[tuple[str, NDArray[np.float64]]]
    ) -> Iterator[str]:
        yield f"# HELP quietmill_{name} {text}\n# TYPE quietmill_{name} gauge\n"
        names = self._names
        for labels, values in columns:
            listed = values.tolist()
            yield from (f"quietmill_{name}{names[row]}{labels}}} {number(listed[row])}\n" for row in rows)
