import json
from collections.abc import Callable, Iterator
from typing import Any

import jsonschema
import pytest

from quietmill.model import Direction, Ended, Rule
from quietmill.signals.event import TYPES
from quietmill.signals.schema import schema
from signals.evidence import event

VALID = jsonschema.Draft202012Validator(schema())


def objects(node: Any) -> Iterator[dict[str, Any]]:
    """Every part of the schema that describes an object with members of its own."""
    if isinstance(node, dict):
        if "properties" in node and "type" in node:
            yield node
        node = list(node.values())
    if isinstance(node, list):
        for part in node:
            yield from objects(part)


def test_the_schema_is_one_itself() -> None:
    jsonschema.Draft202012Validator.check_schema(schema())


def test_no_object_has_room_for_members_that_the_contract_does_not_name() -> None:
    found = list(objects(schema()))
    assert len(found) == 8
    assert all(part["additionalProperties"] is False for part in found)


def test_all_members_are_required_but_how_an_episode_ended() -> None:
    optional = {name for part in objects(schema()) for name in set(part["properties"]) - set(part["required"])}
    assert optional == {"ended"}


def test_the_schema_knows_the_words_of_the_model() -> None:
    known = schema()["properties"]
    members = known["data"]["properties"]
    assert known["type"]["enum"] == [*TYPES.values()]
    assert members["rules"]["items"]["enum"] == [rule.label for rule in Rule]
    assert set(members["direction"]["enum"]) == {direction.label for direction in Direction}
    assert set(members["ended"]["enum"]) == {ended.label for ended in Ended} - {"not_ended"}


def with_nan(told: dict[str, Any]) -> None:
    told["data"]["point"]["value"] = "NaN"


def with_local_time(told: dict[str, Any]) -> None:
    told["time"] = "2026-03-02T09:14:30+01:00"


def with_rule_twice(told: dict[str, Any]) -> None:
    told["data"]["rules"] *= 2


def with_random_id(told: dict[str, Any]) -> None:
    told["id"] = "7f0c8c1e-3a52-4c7e-9a55-0d1f0f3f9a11"


def with_ended(told: dict[str, Any]) -> None:
    told["data"]["ended"] = "quiet"


def with_further_member(told: dict[str, Any]) -> None:
    told["data"]["host"] = "box3"


@pytest.mark.parametrize(
    "spoil", [with_nan, with_local_time, with_rule_twice, with_random_id, with_ended, with_further_member]
)
def test_a_document_with_one_fault_is_refused(spoil: Callable[[dict[str, Any]], None]) -> None:
    told = json.loads(event("cusum high").document)
    VALID.validate(told)
    spoil(told)
    assert not VALID.is_valid(told)
