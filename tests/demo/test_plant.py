import statistics

import numpy as np
import pytest

from quietmill.demo.faults import FAIR_START, Fault, plant_faults
from quietmill.demo.plant import Plant
from quietmill.demo.service import settings_file
from quietmill.intake.message import Message
from quietmill.intake.routes import Routes
from quietmill.model import Rule
from quietmill.settings import Characteristic, load

BEGIN = 1_772_409_600_000_000
MINUTE = 60_000_000


@pytest.fixture(scope="module")
def characteristics() -> tuple[Characteristic, ...]:
    return load(settings_file()).characteristics


def messages(characteristics, seed: int, steps: int, faults=None) -> list[tuple[str, bytes]]:
    plant = Plant(characteristics, faults or {}, seed, BEGIN, MINUTE)
    return [message for _ in range(steps) for message in plant.step()]


def decoded(characteristics, sent: list[tuple[str, bytes]]) -> np.ndarray:
    batch = [Message(topic, payload, 1, False, False, 0, BEGIN + 10**12, 1) for topic, payload in sent]
    result = Routes(characteristics).decode(batch, 0)
    assert not result.refused
    return result.readings


def test_the_same_seed_gives_the_same_plant_and_faults(characteristics) -> None:
    assert messages(characteristics, 5, 9) == messages(characteristics, 5, 9) != messages(characteristics, 6, 9)
    assert plant_faults(characteristics, 5) == plant_faults(characteristics, 5) != plant_faults(characteristics, 6)


def test_every_characteristic_is_read_once_a_step_from_its_own_payload(characteristics) -> None:
    readings = decoded(characteristics, messages(characteristics, 5, 30))
    assert np.bincount(readings["row"]).tolist() == [30] * len(characteristics)
    timed = [row for row, characteristic in enumerate(characteristics) if characteristic.detector.timed]
    for row in timed:
        assert readings["time"][readings["row"] == row].tolist() == [BEGIN + MINUTE * step for step in range(30)]


def test_every_payload_carries_what_was_measured(characteristics) -> None:
    plain = [each.model_copy(update={"payload": None, "topic": each.id}) for each in characteristics]
    sent, measured = decoded(characteristics, messages(characteristics, 5, 30)), decoded(plain, messages(plain, 5, 30))
    for row in range(len(characteristics)):
        values = measured["value"][measured["row"] == row]
        assert sent["value"][sent["row"] == row] == pytest.approx(values, rel=1e-12)
        assert len(set(values.tolist())) > 10


def test_what_a_machine_gathers_for_a_list_is_not_counted_as_sent(characteristics) -> None:
    plant = Plant(characteristics, {}, 5, BEGIN, MINUTE)
    for _ in range(5):
        so_far = plant.step()
        assert so_far
    assert plant.sent == len(decoded(characteristics, messages(characteristics, 5, 5)))
    assert plant.sent < 5 * len(characteristics)


def test_a_machine_with_a_counter_counts_its_messages(characteristics) -> None:
    readings = decoded(characteristics, messages(characteristics, 5, 6))
    counting = [row for row, characteristic in enumerate(characteristics) if characteristic.detector.sequenced]
    assert counting
    for row in counting:
        assert readings["sequence"][readings["row"] == row].tolist() == list(range(6))


def test_readings_in_control_have_the_centre_and_sigma_of_the_settings(characteristics) -> None:
    readings = decoded(characteristics, messages(characteristics, 5, 600))
    for row, characteristic in enumerate(characteristics):
        baseline = characteristic.baseline
        z = (readings["value"][readings["row"] == row] - baseline.centre) / baseline.sigma
        assert abs(z.mean()) < 5 / 600**0.5
        assert 0.85 < z.std() < 1.15


@pytest.mark.parametrize(
    ("kind", "size", "mean", "spread"),
    [("step", 1.5, 1.5, 1.0), ("drift", -2.0, -2.0, 1.0), ("stuck", 0.3, 0.0, 0.3), ("better", 1.0, 1.0, 1.0)],
)
def test_a_fault_has_the_size_that_it_claims(kind: str, size: float, mean: float, spread: float) -> None:
    stream = np.random.default_rng(1)
    late = [Fault(kind, 60, size).change(z, age) for age, z in enumerate(stream.normal(size=2000), start=100)]
    assert statistics.fmean(late) == pytest.approx(mean, abs=0.1)
    assert statistics.stdev(late) == pytest.approx(spread, rel=0.1)


def test_a_spike_lasts_one_point_and_a_cycle_comes_back() -> None:
    assert [Fault("spike", 60, 6.0).change(0.0, age) for age in range(3)] == [6.0, 0.0, 0.0]
    cycle = [Fault("cycle", 60, 2.0).change(0.0, age) for age in range(31)]
    assert max(cycle) == pytest.approx(2.0, abs=0.02)
    assert cycle[30] == pytest.approx(cycle[0], abs=1e-9)


@pytest.mark.parametrize("seed", range(20))
def test_faults_are_fair(characteristics, seed: int) -> None:
    faults = plant_faults(characteristics, seed)
    assert {fault.kind for fault in faults.values()} == {"step", "drift", "cycle", "stuck", "spike", "better"}
    for row, fault in faults.items():
        assert fault.begin >= FAIR_START
        assert fault.kind == "spike" or abs(fault.size) <= 2
        side, rules = characteristics[row].detector.side, characteristics[row].detector.rules
        assert fault.kind != "stuck" or Rule.STRATIFICATION in rules
        assert fault.kind != "spike" or Rule.BEYOND_LIMITS in rules
        assert fault.kind == "cycle" or side == "both" or (fault.size > 0) == (side == "high")
