import json

from quietmill.model import NO_TIME
from quietmill.signals.status import status_document

SIGNAL = "91a23c15-a5f9-5ffd-9287-025501d4f4e3"


def test_a_status_names_condition_since_signal_and_acknowledgement_in_this_order() -> None:
    document = status_document("signal", 1_772_439_270_250_000, SIGNAL)
    assert document.decode() == (
        f'{{"condition":"signal","since":"2026-03-02T08:14:30.25Z","signal":"{SIGNAL}","acknowledged":false}}'
    )


def test_a_characteristic_without_an_open_signal_has_none_in_its_status() -> None:
    status = json.loads(status_document("in_control", NO_TIME, None))
    assert status == {"condition": "in_control", "since": None, "signal": None, "acknowledged": False}


def test_an_acknowledged_signal_says_so() -> None:
    assert json.loads(status_document("signal", 0, SIGNAL, acknowledged=True))["acknowledged"] is True
