"""Planted faults: what goes wrong in the simulated plant, where, when and how much."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import pi, sin
from random import Random
from typing import Final

from quietmill.model import Rule
from quietmill.settings import Characteristic

__all__ = ["FAIR_START", "Fault", "plant_faults"]

FAIR_START: Final = 60
"""Points before the first fault, so that every detector has seen the process as it should be."""
LATEST_START: Final = 130
DRIFT_POINTS: Final = 60
"""A drift has reached its full size after so many points, and stays there."""
CYCLE_POINTS: Final = 30
SPIKE_ECHO: Final = 20
"""So many points after a spike a sum may still carry it; what is said later is said of something else."""


@dataclass(frozen=True, slots=True)
class Fault:
    """One fault: `size` in sigmas of the characteristic (of the spread: a factor), from point `begin` + 1 on."""

    kind: str
    begin: int
    size: float

    def change(self, z: float, age: int) -> float:
        """Return what becomes of an undisturbed z, `age` points after the fault's first (0).

        >>> Fault("step", 60, 1.5).change(-0.25, 3)
        1.25
        """
        match self.kind:
            case "drift":
                return z + self.size * min((age + 1) / DRIFT_POINTS, 1)
            case "cycle":
                return z + self.size * sin(2 * pi * age / CYCLE_POINTS)
            case "stuck":
                return z * self.size
            case "spike":
                return z + self.size if age == 0 else z
            case _:
                return z + self.size

    def explains(self, number: int) -> bool:
        """Return whether a signal at a point (from 1) can be due to this fault.

        >>> [Fault("spike", 60, 6.0).explains(number) for number in (60, 61, 200)]
        [False, True, False]
        """
        return number > self.begin and (self.kind != "spike" or number <= self.begin + 1 + SPIKE_ECHO)

    @property
    def in_words(self) -> str:
        """The fault as the scorecard names it."""
        match self.kind:
            case "drift":
                return f"drift to {self.size:+.2f}σ in {DRIFT_POINTS} points"
            case "cycle":
                return f"cycle of {self.size:.2f}σ, {CYCLE_POINTS} points long"
            case "stuck":
                return f"stuck to {self.size:.2f} of its spread"
            case "spike":
                return f"single spike of {self.size:+.1f}σ"
            case "better":
                return f"good news: {self.size:+.2f}σ"
            case _:
                return f"step of {self.size:+.2f}σ"


def sizes(kind: str, stream: Random) -> float:
    """Return a fair size: nothing that a person would see at a glance, but for the spike."""
    sign = stream.choice((-1, 1))
    match kind:
        case "step":
            return sign * stream.uniform(0.75, 2.0)
        case "drift":
            return sign * stream.uniform(1.25, 2.0)
        case "cycle":
            return stream.uniform(1.6, 2.0)
        case "stuck":
            return stream.uniform(0.2, 0.35)
        case _:
            return sign * stream.uniform(5.5, 6.5)


def plant_faults(characteristics: Sequence[Characteristic], seed: int) -> Mapping[int, Fault]:
    """Return a fault for each of some characteristics, by row; the same seed gives the same faults.

    Every kind is there: a stuck sensor and a spike where a rule can see them, good news where a direction is
    favourable; where only one side may signal, the fault goes there.
    """
    stream = Random(seed)
    rows = range(len(characteristics))
    stuck = [row for row in rows if Rule.STRATIFICATION in characteristics[row].detector.rules]
    better = [row for row in rows if characteristics[row].favourable != "none"]
    faults: dict[int, Fault] = {}

    def plant(row: int, kind: str, size: float) -> None:
        faults[row] = Fault(kind, stream.randint(FAIR_START, LATEST_START), size)

    for row in stream.sample(stuck, min(1, len(stuck))):
        plant(row, "stuck", sizes("stuck", stream))
    for row in stream.sample(better, min(1, len(better))):
        plant(row, "better", stream.uniform(1.0, 1.75) * (1 if characteristics[row].favourable == "high" else -1))
    limited = [row for row in rows if row not in faults and Rule.BEYOND_LIMITS in characteristics[row].detector.rules]
    spikes = dict.fromkeys(stream.sample(limited, min(2, len(limited))), "spike")
    untouched = [row for row in rows if row not in faults and row not in spikes]
    others = ["step"] * 5 + ["drift"] * 2 + ["cycle"]
    for row, kind in [*spikes.items(), *zip(stream.sample(untouched, len(others)), others, strict=True)]:
        size, side = sizes(kind, stream), characteristics[row].detector.side
        if kind != "cycle" and side != "both":
            size = abs(size) if side == "high" else -abs(size)
        plant(row, kind, size)
    return faults
