from io import StringIO

from rich.console import Console

from quietmill.demo.faults import Fault
from quietmill.demo.scorecard import Scorecard

IDS = ["press1.force", "kiln1.oxygen", "glaze.air_pressure"]


def scorecard() -> Scorecard:
    return Scorecard(IDS, {0: Fault("step", 60, 1.5), 1: Fault("spike", 90, 6.0)})


def text(card: Scorecard, steps: int) -> str:
    output = StringIO()
    Console(file=output, width=120).print(card.report(steps))
    return output.getvalue()


def test_a_signal_at_or_after_the_faults_first_point_finds_it_once() -> None:
    card = scorecard()
    card.raised("press1.force", 75)
    card.raised("press1.force", 120)
    assert card.found == {0: 15}
    assert card.false == []
    assert "after 15 points" in text(card, 130)


def test_a_signal_before_its_fault_or_without_one_is_false() -> None:
    card = scorecard()
    card.raised("press1.force", 60)
    card.raised("glaze.air_pressure", 100)
    assert card.found == {}
    assert card.false == ["press1.force", "glaze.air_pressure"]
    assert "2 false signals (glaze.air_pressure, press1.force)" in text(card, 130)


def test_a_fault_that_has_not_begun_is_not_held_against_the_detector() -> None:
    said = text(scorecard(), 70)
    assert "not yet begun" in said
    assert "not in 10 points" in said
    assert "0 of 1 faults that have begun were found" in said


def test_a_signal_long_after_a_spike_is_false() -> None:
    card = scorecard()
    card.raised("kiln1.oxygen", 200)
    assert card.found == {}
    assert card.false == ["kiln1.oxygen"]


def test_points_without_a_fault_are_those_at_which_a_signal_would_be_false() -> None:
    # 60 and 90 before the faults, 19 after the spike's echo of 21 points, 130 on the third.
    assert "in 299 points without a fault" in text(scorecard(), 130)


def test_a_run_that_was_too_short_says_so() -> None:
    said = text(scorecard(), 40)
    assert "No planted fault has begun" in said
    assert "begins at point 61" in said
