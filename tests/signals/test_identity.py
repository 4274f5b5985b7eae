import json
import uuid

import pytest

from quietmill.model import NO_TIME
from quietmill.signals.identity import NAMESPACE, event_id

RAISED = "quietmill.signal.raised"
PARTS = ("press1.force", "3c57abaf", 1_772_439_270_000_000, 214, RAISED, "")


def test_an_id_is_the_uuid5_of_the_compact_array_of_what_it_is_made_of() -> None:
    name = '["press1.force","3c57abaf",1772439270000000,214,"quietmill.signal.raised",""]'
    assert event_id(*PARTS) == str(uuid.uuid5(uuid.UUID("6f1c7a52-5d0e-5b43-9a8e-2f4b7c1d9e60"), name))


def test_an_id_stays_the_same_for_good() -> None:
    assert event_id(*PARTS) == "7a4513df-05ce-545f-82fd-2bda320b910f"


def test_before_the_first_point_the_start_is_an_empty_text() -> None:
    name = json.dumps(["kiln1.zone3", "00000000", "", 0, RAISED, "c-7"], separators=(",", ":"))
    assert event_id("kiln1.zone3", "00000000", NO_TIME, 0, RAISED, "c-7") == str(uuid.uuid5(NAMESPACE, name))


def test_letters_beyond_ascii_enter_as_utf_8() -> None:
    name = f'["kiln","Öfen-2026",5,1,"{RAISED}",""]'
    assert event_id("kiln", "Öfen-2026", 5, 1, RAISED) == str(uuid.uuid5(NAMESPACE, name))


@pytest.mark.parametrize(
    "other",
    [
        ("press2.force", *PARTS[1:]),
        (*PARTS[:1], "3c57abb0", *PARTS[2:]),
        (*PARTS[:2], PARTS[2] + 1, *PARTS[3:]),
        (*PARTS[:3], 215, *PARTS[4:]),
        (*PARTS[:4], "quietmill.signal.joined", ""),
        (*PARTS[:5], "c-7"),
    ],
)
def test_every_part_of_the_name_changes_the_id(other: tuple[str, str, int, int, str, str]) -> None:
    assert event_id(*other) != event_id(*PARTS)
