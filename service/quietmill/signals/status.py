"""How a characteristic stands, as the retained document that a newcomer reads first."""

from typing import Literal

import msgspec

from quietmill.instant import format_time
from quietmill.model import NO_TIME

__all__ = ["Condition", "status_document"]

Condition = Literal["in_control", "signal"]

encode = msgspec.json.Encoder().encode


def status_document(condition: Condition, since: int, signal: str | None, acknowledged: bool = False) -> bytes:
    """Return the status of a characteristic.

    `since` is in microseconds UTC, `NO_TIME` where it is not known; `signal` the id of the raised event of an open
    episode.

    >>> status_document("in_control", NO_TIME, None)
    b'{"condition":"in_control","since":null,"signal":null,"acknowledged":false}'
    """
    begun = None if since == NO_TIME else format_time(since)
    return encode({"condition": condition, "since": begun, "signal": signal, "acknowledged": acknowledged})
