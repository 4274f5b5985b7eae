"""The simulated plant: readings, and the messages in which its machines would send them."""

import json
from collections.abc import Mapping, Sequence
from math import ceil, log10
from random import Random
from typing import Any, Final

from quietmill.demo.faults import Fault
from quietmill.instant import format_time
from quietmill.settings import Characteristic, Payload

__all__ = ["ARRAY_STEPS", "Plant"]

ARRAY_STEPS: Final = 3
"""A machine that sends lists gathers so many readings for one."""
NANOSECONDS: Final = {"s": 1_000_000_000, "ms": 1_000_000, "us": 1000, "ns": 1}


def put(document: dict[str, Any], pointer: str, member: Any) -> None:
    """Put a member into a document at a JSON Pointer, making what is on the way."""
    steps = [step.replace("~1", "/").replace("~0", "~") for step in pointer.split("/")[1:]]
    for step in steps[:-1]:
        document = document.setdefault(step, {})
    document[steps[-1]] = member


class Plant:
    """Every characteristic measured once a step, `interval` microseconds apart, the first time at `begin`.

    In control a reading is normal and independent, centre and sigma those of the settings, rounded as its machine
    sends it to a twentieth of sigma or finer. The same seed gives the same readings.
    """

    def __init__(
        self,
        characteristics: Sequence[Characteristic],
        faults: Mapping[int, Fault],
        seed: int,
        begin: int,
        interval: int,
    ) -> None:
        self._characteristics = characteristics
        self._faults = faults
        self._begin, self._interval = begin, interval
        self._streams = [Random(f"{seed} {characteristic.id}") for characteristic in characteristics]
        self._scales = [
            (1.0, 0.0) if payload is None else (payload.scale, payload.offset)
            for payload in (characteristic.payload for characteristic in characteristics)
        ]
        self._decimals = [
            max(0, ceil(-log10(characteristic.baseline.sigma / abs(scale) / 20)))
            for characteristic, (scale, _) in zip(characteristics, self._scales, strict=True)
        ]
        self._topics: dict[str, list[int]] = {}
        for row, characteristic in enumerate(characteristics):
            self._topics.setdefault(characteristic.topic, []).append(row)
        self._gathered: dict[int, list[Any]] = {}
        self.steps = 0
        self.sent = 0
        """How many readings stand in the messages so far; what machines still gather for a list does not count."""

    @property
    def time(self) -> int:
        """Simulated time of the next step, microseconds UTC."""
        return self._begin + self.steps * self._interval

    def step(self) -> list[tuple[str, bytes]]:
        """Measure everything once; return the messages that this gives, topic and payload."""
        found: list[tuple[str, bytes]] = []
        measured = [self._measure(row) for row in range(len(self._characteristics))]
        for topic, rows in self._topics.items():
            document: dict[str, Any] = {}
            for row in rows:
                payload = self._characteristics[row].payload
                if payload is None or payload.value is None:
                    found.append((topic, str(measured[row]).encode()))
                    self.sent += 1
                elif payload.array is None:
                    self._fill(document, payload, measured[row])
                    self.sent += 1
                else:
                    self._gather(document, payload, row, measured[row])
            if document:
                found.append((topic, json.dumps(document).encode()))
        self.steps += 1
        return found

    def _measure(self, row: int) -> float | int:
        """Return what a machine measures at this step, as it sends it: before scale and offset."""
        baseline, fault = self._characteristics[row].baseline, self._faults.get(row)
        z = self._streams[row].gauss()
        if fault is not None and self.steps >= fault.begin:
            z = fault.change(z, self.steps - fault.begin)
        scale, offset = self._scales[row]
        number = (baseline.centre + z * baseline.sigma - offset) / scale
        decimals = self._decimals[row]
        return round(number, decimals) + 0.0 if decimals else round(number)

    def _fill(self, document: dict[str, Any], payload: Payload, number: float) -> None:
        """Write what was measured into a document where the settings will look for it."""
        put(document, payload.value or "", str(number) if payload.parse_strings else number)
        if payload.time is not None:
            unit = payload.time_unit
            time = format_time(self.time) if unit is None else self.time * 1000 // NANOSECONDS[unit]
            put(document, payload.time, time)
        if payload.sequence is not None:
            put(document, payload.sequence, self.steps)

    def _gather(self, document: dict[str, Any], payload: Payload, row: int, number: float) -> None:
        """Add what was measured to a machine's list, and put the list into a document once it is full."""
        item: dict[str, Any] = {}
        self._fill(item, payload, number)
        gathered = self._gathered.setdefault(row, [])
        gathered.append(item)
        if len(gathered) == ARRAY_STEPS:
            put(document, payload.array or "", self._gathered.pop(row))
            self.sent += ARRAY_STEPS
