import json
from collections.abc import Sequence
from typing import Any

import jsonschema
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from quietmill.charts.bank import Bank
from quietmill.model import READING, Direction, Ended, Notice, Rule
from quietmill.settings import Characteristic
from quietmill.signals.event import Event, Herald
from quietmill.signals.schema import schema
from signals.evidence import NAN, RAISED_AT, START, bits, event, order, press, returned, verdicts

VALID = jsonschema.Draft202012Validator(schema())


def document(of: Event) -> dict[str, Any]:
    """The event's document, which meets the schema."""
    told = json.loads(of.document)
    VALID.validate(told)
    return told


def data(of: Event) -> dict[str, Any]:
    return document(of)["data"]


def judged(characteristic: Characteristic, values: list[float], cuts: Sequence[int] = ()) -> list[Event]:
    """The events of a series through the real bank, cut into batches at `cuts`."""
    readings = np.zeros(len(values), READING)
    readings["message"] = np.arange(len(values))
    readings["time"] = readings["arrival"] = START + 30_000_000 * np.arange(len(values))
    readings["value"] = values
    bank, herald = Bank([characteristic.detector]), Herald([characteristic], "quietmill")
    return [event for batch in np.split(readings, list(cuts)) for event in herald.events(bank.judge(batch))]


def test_a_raised_event_is_the_contracts_document_to_the_last_key() -> None:
    raised = event("beyond_limits high")
    assert json.dumps(document(raised), separators=(",", ":")) == (
        f'{{"specversion":"1.0","id":"{raised.id}","source":"quietmill","type":"quietmill.signal.raised",'
        '"subject":"press1.force","time":"2026-03-02T08:14:30Z","datacontenttype":"application/json",'
        f'"data":{{"signal":"{raised.id}","characteristic":"press1.force","unit":"kN",'
        f'"labels":{{"area":"pressing"}},"summary":"{raised.summary}",'
        '"rules":["beyond_limits"],"direction":"high","favourable":false,'
        '"point":{"number":214,"time":"2026-03-02T08:14:30Z","value":249.1,"z":4.55},"centre":240.0,"sigma":2.0,'
        '"limits":{"lower":234.0,"upper":246.0},"spread":null,"baseline":"3c57abaf",'
        '"specification":{"lower":230.0,"upper":250.0,"met":true},'
        '"onset":{"time":"2026-03-02T08:11:00Z","point":207,"shift":6.2,"shift_sigma":3.1},'
        '"recent":[{"number":213,"time":"2026-03-02T08:14:00Z","value":240.3},'
        '{"number":214,"time":"2026-03-02T08:14:30Z","value":249.1}],'
        '"reaction":"Check the die temperature, then the powder moisture."}}'
    )


def test_the_document_is_one_line_even_where_the_reaction_plan_has_several() -> None:
    plan = "1. Stop the feed.\n2. Prüfen: „Presse 1“\r\n"
    told = event("cusum low", characteristic=press(reaction=plan))
    assert b"\n" not in told.document
    assert b"\r" not in told.document
    assert "Prüfen".encode() in told.document
    assert data(told)["reaction"] == plan


def test_what_a_characteristic_does_not_have_is_null() -> None:
    bare = press(unit=None, specification=None, reaction=None, labels={})
    told = data(event("cusum high", characteristic=bare))
    assert [told[key] for key in ("unit", "specification", "reaction", "labels")] == [None, None, None, {}]


def test_a_limit_that_cannot_be_reached_and_a_shift_that_is_not_there_are_null() -> None:
    told = data(event("trend high", point={"lower": NAN}, shift=NAN, shift_sigma=NAN))
    assert told["limits"] == {"lower": None, "upper": 246.0}
    assert (told["onset"]["shift"], told["onset"]["shift_sigma"]) == (None, None)


def test_a_spread_is_shown_with_its_limits() -> None:
    told = data(event("spread high", point={"spread": 9.25, "spread_upper": 7.37}, shift=NAN, shift_sigma=NAN))
    assert told["spread"] == {"value": 9.25, "lower": None, "upper": 7.37}


@pytest.mark.parametrize(
    ("value", "limits", "met"),
    [
        (250.0, {"lower": 230.0, "upper": 250.0}, True),
        (250.1, {"lower": 230.0, "upper": 250.0}, False),
        (229.9, {"lower": 230.0}, False),
        (230.0, {"lower": 230.0}, True),
        (1000.0, {"lower": 230.0}, True),
        (230.0, {"upper": 230.0}, True),
    ],
)
def test_a_specification_is_met_on_its_limits_and_on_a_side_that_has_none(
    value: float, limits: dict[str, float], met: bool
) -> None:
    told = data(event("cusum high", characteristic=press(specification=limits), point={"value": value}))
    assert told["specification"] == {"lower": None, "upper": None, **limits, "met": met}


def test_the_rules_stand_in_the_order_of_joining() -> None:
    members = bits("same_side high", "cusum high", "beyond_limits high")
    joined_so_far = order(Rule.CUSUM, Rule.SPREAD, Rule.BEYOND_LIMITS)
    told = data(event("beyond_limits high", kind=Notice.JOINED, members=members, order=joined_so_far))
    assert told["rules"] == ["cusum", "spread", "beyond_limits"]


def test_all_rules_at_once_are_told() -> None:
    told = data(event("cusum high", kind=Notice.JOINED, order=order(*Rule)))
    assert told["rules"] == [rule.label for rule in Rule]


@pytest.mark.parametrize(
    ("members", "direction"),
    [
        (["cusum high", "mixture"], Direction.HIGH),
        (["trend low"], Direction.LOW),
        (["stratification"], Direction.NONE),
        (["cusum low", "beyond_limits high"], Direction.BOTH),
    ],
)
def test_direction_is_that_of_all_members_and_favourable_only_while_it_is_the_wanted_one(
    members: list[str], direction: Direction
) -> None:
    for wanted in ("high", "low", "none"):
        told = data(event(*members, characteristic=press(favourable=wanted)))
        assert told["direction"] == direction.label
        assert told["favourable"] is (direction is not Direction.NONE and direction.label == wanted)


def test_all_events_of_an_episode_name_the_id_of_its_raised_event() -> None:
    raised = event("beyond_limits high")
    joined = event("cusum high", kind=Notice.JOINED, point={"number": 215})
    over = returned()
    assert raised.signal == raised.id == joined.signal == over.signal
    assert len({raised.id, joined.id, over.id}) == 3


def test_a_point_that_raises_again_after_a_restart_gives_another_id() -> None:
    assert event("cusum high").id != event("cusum high", start=START + 1).id


def test_another_baseline_gives_another_id() -> None:
    other = press(baseline={"centre": 240.0, "sigma": 2.5})
    assert event("cusum high").id != event("cusum high", characteristic=other).id


@pytest.mark.parametrize("ended", set(Ended) - {Ended.NOT_ENDED}, ids=lambda ended: ended.label)
def test_a_returned_event_says_why_the_episode_ended(ended: Ended) -> None:
    assert data(returned(ended=ended))["ended"] == ended.label


def test_only_a_returned_event_says_how_it_ended() -> None:
    assert "ended" not in data(event("cusum high"))
    told = document(returned())
    del told["data"]["ended"]
    assert not VALID.is_valid(told)


def test_numbers_are_written_with_the_fewest_digits_that_read_back_the_same() -> None:
    told = event("cusum high", point={"value": 0.1 + 0.2, "z": 1e-7, "centre": 5e-324, "sigma": 1e150})
    assert b'"value":0.30000000000000004,"z":1e-7' in told.document
    assert data(told)["centre"] == 5e-324


def test_an_event_carries_what_the_service_needs_beside_its_document() -> None:
    told = event("beyond_limits high", "cusum high")
    assert (told.notice, told.row, told.characteristic) == (Notice.RAISED, 0, "press1.force")
    assert (told.time, told.raised_time) == (RAISED_AT, RAISED_AT)
    assert told.started == (Rule.BEYOND_LIMITS, Rule.CUSUM)


def test_a_batch_without_notices_gives_no_events() -> None:
    one = verdicts(bits("cusum high"))
    none = one._replace(notices=one.notices[:0], recent=one.recent[:0])
    assert Herald([press()], "quietmill").events(none) == []


def test_an_episode_from_the_bank_is_raised_joined_and_returned() -> None:
    watched = press(rules=[{"same_side": 9}, "beyond_limits"], quiet_points=3)
    events = judged(watched, [240.0] * 30 + [241.0] * 9 + [247.0] + [240.0] * 3)
    assert [(told.notice, told.started) for told in events] == [
        (Notice.RAISED, (Rule.SAME_SIDE,)),
        (Notice.JOINED, (Rule.BEYOND_LIMITS,)),
        (Notice.RETURNED, ()),
    ]
    raised, joined, over = (data(told) for told in events)
    assert raised["onset"] == joined["onset"] == over["onset"]
    assert (raised["onset"]["point"], raised["onset"]["shift"]) == (31, 1.0)
    assert [point["number"] for point in raised["recent"]] == [*range(15, 40)]
    assert over["rules"] == ["same_side", "beyond_limits"]


@given(st.integers(0, 2**32 - 1), st.lists(st.integers(1, 199), max_size=5).map(sorted))
def test_events_do_not_depend_on_how_the_series_is_cut(seed: int, cuts: list[int]) -> None:
    watched = press(rules="nelson", ewma={"lambda": 0.1, "L": 2.8}, cusum={"k": 0.5, "h": 5}, spread="signal")
    values = np.random.default_rng(seed).normal(240.5, 2.5, 200).tolist()
    whole = judged(watched, values)
    assert [told.document for told in judged(watched, values, cuts)] == [told.document for told in whole]
    for told in whole:
        VALID.validate(json.loads(told.document))
