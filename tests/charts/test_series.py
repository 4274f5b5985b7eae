"""Every rule, EWMA and CUSUM at every point of published worked examples and of a series per edge.

The sources stand in series.json beside each series; all published values are from memory, recomputed independently.
"""

import json
from math import isnan
from pathlib import Path

import pytest

from charts import reference
from charts.feeding import every_way, judged, readings_of
from quietmill.model import COUNTS, Cusum, Detector, Ewma, Rule, rules_in

SERIES = json.loads((Path(__file__).parent / "series.json").read_text())


def detector_of(entry: dict) -> Detector:
    rules = {Rule(number - 1): COUNTS.get(Rule(number - 1), (0, 0, 0))[0] for number in entry["rules"]}
    if "same_side" in entry:
        rules[Rule.SAME_SIDE] = entry["same_side"]
    ewma, cusum = entry["ewma"], entry["cusum"]
    return Detector(
        float(entry["centre"]),
        float(entry["sigma"]),
        rules=rules,
        ewma=Ewma(float(ewma["lam"]), float(ewma["L"]), ewma["limits"] == "exact") if ewma else None,
        cusum=Cusum(float(cusum["k"]), float(cusum["h"]), float(cusum.get("head", 0))) if cusum else None,
    )


def named(rule: Rule, side: int) -> int | str:
    """Return a rule as the series name it: Nelson's number, or ewma+, cusum-."""
    return rule + 1 if rule < Rule.EWMA else f"{rule.label}{'+' if side == 1 else '-'}"


@pytest.mark.parametrize("name", SERIES)
def test_the_bank_signals_where_the_series_says(name: str) -> None:
    entry = SERIES[name]
    points = judged(detector_of(entry), [float(value) for value in entry["points"]]).points
    found = [
        [place, named(rule, side)]
        for place, word in enumerate(points["bits"].tolist())
        for rule in rules_in(word)
        for side in (1, 2)
        if word >> (2 * rule) & side
    ]
    assert sorted(map(str, found)) == sorted(map(str, entry["signals"]))


@pytest.mark.parametrize("name", SERIES)
def test_the_reference_signals_where_the_series_says(name: str) -> None:
    entry = SERIES[name]
    points = reference.judge([float(value) for value in entry["points"]], detector_of(entry))
    found = [[place, named(rule, side)] for place, point in enumerate(points) for rule, side in point.holds]
    assert sorted(map(str, found)) == sorted(map(str, entry["signals"]))


@pytest.mark.parametrize("name", SERIES)
def test_the_statistics_at_every_point_are_those_of_the_series(name: str) -> None:
    entry = SERIES[name]
    points = judged(detector_of(entry), [float(value) for value in entry["points"]]).points
    columns = {"z": "z", "mr": "spread", "ewma": "ewma", "s_hi": "cusum_high", "s_lo": "cusum_low"}
    for column, texts in entry["statistics"].items():
        for text, value in zip(texts, points[columns[column]].tolist(), strict=True):
            assert isnan(value) if text == "" else value == pytest.approx(float(text), rel=1e-8, abs=1e-8)


@pytest.mark.parametrize("name", SERIES)
def test_every_way_of_feeding_a_series_says_the_same(name: str) -> None:
    readings = readings_of([float(value) for value in SERIES[name]["points"]])
    first, *others = every_way([detector_of(SERIES[name])], readings)
    for other in others:
        assert other == first


def test_the_limits_of_the_nist_flow_rates_are_the_published_ones() -> None:
    """NIST/SEMATECH e-Handbook 6.3.2.2, from memory: 55.8041 and 45.8159 about 50.81."""
    entry = SERIES["nist_flowrate"]
    points = judged(detector_of(entry), [float(value) for value in entry["points"]]).points
    assert points["upper"][0] == pytest.approx(55.8041, abs=5e-5)
    assert points["lower"][0] == pytest.approx(45.8159, abs=5e-5)
