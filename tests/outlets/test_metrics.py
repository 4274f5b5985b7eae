import math
from collections.abc import Iterable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from prometheus_client import Metric
from prometheus_client.parser import text_string_to_metric_families

from quietmill import __version__
from quietmill.charts.bank import Bank
from quietmill.model import READING, Outcome, Rule
from quietmill.outlets.metrics import SHOWN, Copies, Histogram, Tally, Writer, escaped, number, shown
from quietmill.settings import Characteristic

TIME = 1_772_439_270_250_000
SLOW = {"ewma": {"lambda": 0.1, "L": 2.8}, "cusum": {"k": 0.5, "h": 5}}
OF_CHARACTERISTICS = {
    "quietmill_point_value",
    "quietmill_point_centre",
    "quietmill_point_limit",
    "quietmill_point_ewma",
    "quietmill_point_cusum",
    "quietmill_signal_open",
    "quietmill_signals",
    "quietmill_last_reading_timestamp_seconds",
}
OF_THE_SERVICE = {
    "quietmill_readings",
    "quietmill_messages_qos0",
    "quietmill_decision_seconds",
    "quietmill_batch_readings",
    "quietmill_config_last_reload_successful",
    "quietmill_broker_connected",
    "quietmill_outbox_events",
    "quietmill_journal_bytes",
    "quietmill_build_info",
}

Samples = dict[tuple[str, frozenset[tuple[str, str]]], float]


class Plant:
    """Two presses, one with slow detectors, and what the loop would hand over for them."""

    def __init__(self) -> None:
        fixed = {"topic": "tiles/press", "baseline": {"centre": 240.0, "sigma": 2.0}, "rules": ["beyond_limits"]}
        entries = [{"id": "press1.force", **fixed, **SLOW}, {"id": "press2.force", **fixed}]
        self.characteristics = [Characteristic.model_validate(entry) for entry in entries]
        self.bank = Bank([characteristic.detector for characteristic in self.characteristics])
        self.tally = Tally(2)
        self.writer = Writer(self.characteristics)
        self.messages = 0

    def judge(self, row: int, *values: float) -> None:
        readings = np.zeros(len(values), READING)
        readings["row"], readings["value"] = row, values
        readings["message"] = self.messages + np.arange(len(values))
        readings["time"] = readings["arrival"] = TIME + 1_000_000 * readings["message"]
        self.messages += len(values)
        self.bank.judge(readings)

    def text(self, connected: bool = True, outbox: int = 0, messages_qos0: int = 0) -> str:
        tally = self.tally
        arrays = (self.bank.rows, shown(self.bank.state), tally.signals, tally.outcomes, tally.decision, tally.batch)
        return self.writer.write(Copies(*arrays, messages_qos0, connected, outbox)).decode()

    def families(self) -> list[Metric]:
        return list(text_string_to_metric_families(self.text()))

    def samples(self, connected: bool = True, outbox: int = 0, messages_qos0: int = 0) -> Samples:
        families = text_string_to_metric_families(self.text(connected, outbox, messages_qos0))
        return {(s.name, frozenset(s.labels.items())): s.value for family in families for s in family.samples}


@pytest.fixture
def plant() -> Plant:
    return Plant()


def of(samples: Samples, name: str, **labels: str) -> float:
    return samples[name, frozenset(labels.items())]


def names(families: Iterable[Metric]) -> set[str]:
    return {family.name for family in families}


def test_all_metrics_of_the_contract_are_there_and_no_others(plant: Plant) -> None:
    assert names(plant.families()) == OF_CHARACTERISTICS | OF_THE_SERVICE


def test_every_family_is_one_block_with_help_and_type(plant: Plant) -> None:
    families = plant.families()
    assert len(families) == len(names(families))
    assert all(family.documentation.endswith(".") for family in families)
    assert all(family.type in {"gauge", "counter", "histogram"} for family in families)


def test_a_press_shows_its_last_point_and_limits(plant: Plant) -> None:
    plant.judge(0, 241.0, 243.5)
    samples = plant.samples()
    assert of(samples, "quietmill_point_value", characteristic="press1.force") == 243.5
    assert of(samples, "quietmill_point_centre", characteristic="press1.force") == 240.0
    assert of(samples, "quietmill_point_limit", characteristic="press1.force", side="lower") == 234.0
    assert of(samples, "quietmill_point_limit", characteristic="press1.force", side="upper") == 246.0
    assert of(samples, "quietmill_last_reading_timestamp_seconds", characteristic="press1.force") == 1772439271.25


def test_the_moving_average_is_in_the_unit_and_the_sums_are_in_sigmas(plant: Plant) -> None:
    plant.judge(0, 243.0, 239.0)
    samples = plant.samples()
    average = 240 + 0.1 * -1.0 + 0.9 * (0.1 * 3.0)
    assert of(samples, "quietmill_point_ewma", characteristic="press1.force") == pytest.approx(average)
    assert of(samples, "quietmill_point_cusum", characteristic="press1.force", side="high") == pytest.approx(0.0)
    plant.judge(0, 242.0)
    samples = plant.samples()
    assert of(samples, "quietmill_point_cusum", characteristic="press1.force", side="high") == pytest.approx(0.5)


def test_a_characteristic_has_series_of_its_own_detectors_only(plant: Plant) -> None:
    samples = plant.samples()
    mine = {
        (name, dict(labels).get("rule")) for name, labels in samples if ("characteristic", "press2.force") in labels
    }
    assert ("quietmill_signals_total", "beyond_limits") in mine
    assert ("quietmill_signals_total", "cusum") not in mine
    assert not {"quietmill_point_ewma", "quietmill_point_cusum"} & {name for name, _ in mine}


def test_a_characteristic_without_a_point_shows_nan_where_nothing_is_known(plant: Plant) -> None:
    samples = plant.samples()
    for name in ("point_value", "point_ewma", "last_reading_timestamp_seconds"):
        assert math.isnan(of(samples, f"quietmill_{name}", characteristic="press1.force"))
    assert of(samples, "quietmill_signal_open", characteristic="press1.force") == 0


def test_no_series_appears_or_goes_with_the_readings(plant: Plant) -> None:
    before = plant.samples().keys()
    plant.judge(0, *[240.0] * 30, 250.0)
    plant.tally.signals[0, Rule.BEYOND_LIMITS] += 1
    assert plant.samples().keys() == before


def test_an_open_signal_is_told_and_counted_by_its_rule(plant: Plant) -> None:
    plant.judge(1, 250.0)
    plant.tally.signals[1, Rule.BEYOND_LIMITS] += 3
    samples = plant.samples()
    assert of(samples, "quietmill_signal_open", characteristic="press2.force") == 1
    assert of(samples, "quietmill_signal_open", characteristic="press1.force") == 0
    assert of(samples, "quietmill_signals_total", characteristic="press2.force", rule="beyond_limits") == 3
    assert of(samples, "quietmill_signals_total", characteristic="press1.force", rule="beyond_limits") == 0


def test_every_outcome_is_counted_from_the_start(plant: Plant) -> None:
    plant.tally.outcomes[Outcome.NOT_A_NUMBER] += 7
    samples = plant.samples()
    counts = {outcome: of(samples, "quietmill_readings_total", outcome=outcome.label) for outcome in Outcome}
    assert counts == {outcome: 7 if outcome is Outcome.NOT_A_NUMBER else 0 for outcome in Outcome}


def test_the_service_tells_its_version_connection_and_outbox(plant: Plant) -> None:
    samples = plant.samples(connected=False, outbox=12, messages_qos0=5)
    assert of(samples, "quietmill_build_info", version=__version__) == 1
    assert of(samples, "quietmill_broker_connected") == 0
    assert of(samples, "quietmill_outbox_events") == 12
    assert of(samples, "quietmill_messages_qos0_total") == 5
    assert of(plant.samples(connected=True), "quietmill_broker_connected") == 1


def test_a_decision_time_is_in_all_buckets_from_its_own_on(plant: Plant) -> None:
    plant.tally.decision.observe(np.array([0.0004, 0.003, 99.0]))
    samples = plant.samples()
    name = "quietmill_decision_seconds"
    assert [of(samples, f"{name}_bucket", le=le) for le in ("0.0005", "0.002", "0.005", "10", "+Inf")] == [
        1,
        1,
        2,
        2,
        3,
    ]
    assert of(samples, f"{name}_count") == 3
    assert of(samples, f"{name}_sum") == pytest.approx(99.0034)


@given(st.lists(st.lists(st.sampled_from([0.0, 0.5, 1.0, 1.5, 2.0, 3.0])), max_size=4))
def test_many_observations_at_once_count_as_one_by_one(batches: list[list[float]]) -> None:
    histogram, values = Histogram([1.0, 2.0]), [value for batch in batches for value in batch]
    for batch in batches:
        histogram.observe(np.array(batch, np.float64))
    counts = [sum(v <= 1 for v in values), sum(1 < v <= 2 for v in values), sum(v > 2 for v in values)]
    assert histogram.counts.tolist() == counts
    assert histogram.sum == pytest.approx(sum(values))


def test_a_clock_set_back_lets_no_sum_fall() -> None:
    histogram = Histogram([1.0])
    histogram.observe(np.array([-3600.0]))
    assert (histogram.counts.tolist(), histogram.sum) == ([1, 0], 0.0)


def test_a_copy_of_a_histogram_does_not_move_with_it() -> None:
    histogram = Histogram([1.0])
    twin = histogram.copy()
    histogram.observe(np.array([0.5, 2.0]))
    assert (twin.counts.tolist(), twin.sum) == ([0, 0], 0.0)


def test_what_is_shown_of_the_state_is_a_copy(plant: Plant) -> None:
    before = shown(plant.bank.state)
    plant.judge(0, 243.0)
    assert before.dtype.names == SHOWN
    assert before["number"].tolist() == [0, 0]
    assert shown(plant.bank.state)["value"].tolist()[0] == 243.0


@given(st.text())
def test_any_text_in_a_label_is_read_back_as_it_was(text: str) -> None:
    (family,) = text_string_to_metric_families(f'x{{label="{escaped(text)}"}} 1\n')
    assert family.samples[0].labels == {"label": text}


@given(st.floats())
def test_any_number_is_read_back_as_it_was(value: float) -> None:
    (family,) = text_string_to_metric_families(f"x {number(value)}\n")
    read = family.samples[0].value
    assert read == value or (math.isnan(read) and math.isnan(value))


def test_numbers_that_are_none_are_written_as_the_format_wants_them() -> None:
    assert [number(value) for value in (math.nan, math.inf, -math.inf)] == ["NaN", "+Inf", "-Inf"]
