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
UNITS: Final = {"s": 1_000_000, "ms": 1000, "us": 1}


def put(document: dict[str, Any], pointer: str, member: Any) -> None:
    """Put a member into a document at a JSON Pointer, making what is on the way."""
    steps = [step.replace("~1", "/").replace("~0", "~") for step in pointer.split("/")[1:]]
    for step in steps[:-1]:
        document = document.setdefault(step, {})
    document[steps[-1]] = member


class Plant:
    """Every characteristic measured once a step, `interval` microseconds apart, the first time at `begin`.

    In control a reading is normal and independent, centre and sigma those of the settings, rounded to a twentieth of
    sigma or finer. The same seed gives the same readings.
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
        self._decimals = [
            max(0, ceil(-log10(characteristic.baseline.sigma / 20))) for characteristic in characteristics
        ]
        self._topics: dict[str, list[int]] = {}
        for row, characteristic in enumerate(characteristics):
            self._topics.setdefault(characteristic.topic, []).append(row)
        self._gathered: dict[int, list[Any]] = {}
        self.steps = 0

    @property
    def time(self) -> int:
        """Simulated time of the next step, microseconds UTC."""
        return self._begin + self.steps * self._interval

    def step(self) -> list[tuple[str, bytes]]:
        """Measure everything once; return the messages that this gives, topic and payload."""
        time, number = self.time, self.steps
        values = [self._measure(row) for row in range(len(self._characteristics))]
        self.steps += 1
        found: list[tuple[str, bytes]] = []
        for topic, rows in self._topics.items():
            document: dict[str, Any] = {}
            for row in rows:
                payload, value = self._characteristics[row].payload, values[row]
                if payload is None or payload.value is None:
                    found.append((topic, f"{value}".encode()))
                elif payload.array is None:
                    self._fill(document, payload, value, time, number)
                else:
                    item: dict[str, Any] = {}
                    self._fill(item, payload, value, time, number)
                    gathered = self._gathered.setdefault(row, [])
                    gathered.append(item)
                    if len(gathered) == ARRAY_STEPS:
                        put(document, payload.array, gathered)
                        self._gathered[row] = []
            if document:
                found.append((topic, json.dumps(document).encode()))
        return found

    def _measure(self, row: int) -> float:
        """Return the reading of a characteristic at this step, in its unit."""
        baseline, fault = self._characteristics[row].baseline, self._faults.get(row)
        z = self._streams[row].gauss()
        if fault is not None and self.steps >= fault.begin:
            z = fault.change(z, self.steps - fault.begin)
        return round(baseline.centre + z * baseline.sigma, self._decimals[row])

    @staticmethod
    def _fill(document: dict[str, Any], payload: Payload, value: float, time: int, number: int) -> None:
        """Write a reading into a document where the settings will look for it."""
        raw = value if payload.scale == 1 and payload.offset == 0 else (value - payload.offset) / payload.scale
        put(document, payload.value or "", str(raw) if payload.parse_strings else raw)
        if payload.time is not None:
            unit = payload.time_unit
            put(document, payload.time, format_time(time) if unit is None else time // UNITS[unit])
        if payload.sequence is not None:
            put(document, payload.sequence, number)
