"""How a characteristic stands, as the retained document that a newcomer reads first."""

import msgspec

from quietmill.instant import format_time
from quietmill.model import NO_TIME

__all__ = ["status_document"]

encode = msgspec.json.Encoder().encode


def status_document(condition: str, since: int, signal: str | None, acknowledged: bool = False) -> bytes:
    """Return the status of a characteristic.

    `condition` is `in_control` or `signal`; `since` microseconds UTC, `NO_TIME` before the first point; `signal` the
    id of the raised event of an open episode.
    """
    begun = None if since == NO_TIME else format_time(since)
    return encode({"condition": condition, "since": begun, "signal": signal, "acknowledged": acknowledged})
