"""Names that the same data under the same settings always get."""

import json
from typing import Final
from uuid import UUID, uuid5

from quietmill.model import NO_TIME

__all__ = ["NAMESPACE", "event_id"]

NAMESPACE: Final = UUID("6f1c7a52-5d0e-5b43-9a8e-2f4b7c1d9e60")
"""The namespace of all event ids; it never changes, or every consumer would see every event anew."""

encode = json.JSONEncoder(ensure_ascii=False, separators=(",", ":")).encode


def event_id(characteristic: str, baseline: str, start: int, number: int, kind: str, command: str = "") -> str:
    """Return the UUIDv5 of an event.

    `start` is the time, in microseconds, of the first point since the detector's last start (`NO_TIME`, and number 0,
    before one), `number` that of the event's point, `command` the id of the command that made the event.
    """
    begun = "" if start == NO_TIME else start
    name = [characteristic, baseline, begun, number, kind, command]
    return str(uuid5(NAMESPACE, encode(name)))
