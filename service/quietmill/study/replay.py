"""Replay: history through the very engine that judges live readings."""

import time
from collections.abc import Callable, Iterable, Sequence
from contextlib import ExitStack
from dataclasses import dataclass, field
from math import isnan
from pathlib import Path
from typing import Final, TextIO

import numpy as np
from numpy.typing import NDArray
from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from quietmill.charts.bank import Bank
from quietmill.instant import format_time
from quietmill.model import Notice, Outcome, Records, Rule, Verdicts, rules_in
from quietmill.settings import Settings
from quietmill.signals.event import Herald
from quietmill.study.columns import DataError
from quietmill.study.data import History, Refusal

__all__ = ["POINT_COLUMNS", "Replayed", "replay"]

POINT_COLUMNS: Final = (
    *("characteristic", "number", "time", "value", "centre", "lower", "upper", "z"),
    *("spread", "spread_lower", "spread_upper", "ewma", "cusum_high", "cusum_low", "rules"),
)
SHOWN_REFUSALS: Final = 20
SHOWN_CHARACTERISTICS: Final = 40


@dataclass(slots=True)
class Replayed:
    """What a replay found; counts a row and rule have shape (rows, rules)."""

    ids: Sequence[str]
    outcomes: NDArray[np.int64] = field(default_factory=lambda: np.zeros(len(Outcome), np.int64))
    points: NDArray[np.int64] = field(init=False)
    raised: NDArray[np.int64] = field(init=False)
    started: NDArray[np.int64] = field(init=False)
    refusals: list[Refusal] = field(default_factory=list[Refusal])
    seconds: float = 0.0

    def __post_init__(self) -> None:
        rows = len(self.ids)
        self.points = np.zeros(rows, np.int64)
        self.raised = np.zeros(rows, np.int64)
        self.started = np.zeros((rows, len(Rule)), np.int64)

    @property
    def refused(self) -> int:
        """How many rows gave no reading."""
        return int(self.outcomes.sum() - self.outcomes[[Outcome.ACCEPTED, Outcome.LATE, Outcome.REPEATED]].sum())

    def count(self, verdicts: Verdicts) -> None:
        """Add the verdicts on a chunk."""
        self.outcomes += np.bincount(verdicts.outcomes, minlength=len(Outcome))
        self.points += np.bincount(verdicts.points["row"], minlength=len(self.ids))
        for notice in verdicts.notices:
            row = int(notice["row"])
            self.raised[row] += notice["kind"] == Notice.RAISED
            for rule in rules_in(int(notice["joined"])):
                self.started[row, rule] += 1

    def refuse(self, refusals: Iterable[Refusal]) -> None:
        """Count rows that gave no reading; the first ones are kept to be named."""
        for refusal in refusals:
            self.outcomes[refusal.outcome] += 1
            if len(self.refusals) < SHOWN_REFUSALS:
                self.refusals.append(refusal)

    def report(self) -> RenderableType:
        """Return the closing tables: rows that were bad, outcomes, signals by rule and characteristic."""
        parts: list[RenderableType] = [
            Text(f"{refusal.file}:{refusal.line}: {refusal.outcome.label}: {refusal.reason}", style="yellow")
            for refusal in self.refusals
        ]
        if self.refused > len(self.refusals):
            parts.append(
                Text(f"… and {self.refused - len(self.refusals):,} more rows that gave no reading", style="yellow")
            )
        total = int(self.outcomes.sum())
        rate = f", {total / self.seconds:,.0f} a second" if self.seconds > 0 else ""
        counted = [
            f"{int(self.outcomes[outcome]):,} {outcome.label}"
            for outcome in Outcome
            if self.outcomes[outcome] or outcome is Outcome.ACCEPTED
        ]
        parts.append(Text(f"{total:,} readings in {self.seconds:.1f} s{rate}: {', '.join(counted)}"))
        signals, points = int(self.raised.sum()), int(self.points.sum())
        each = f", one in {points / signals:,.0f} points" if signals else ""
        parts.append(Text(f"{points:,} points, {signals:,} signal{'s' * (signals != 1)}{each}"))
        if signals:
            parts += [Text(), self._by_characteristic()]
        return Group(*parts)

    def _by_characteristic(self) -> Table:
        used = [rule for rule in Rule if self.started[:, rule].any()]
        table = Table(box=None, padding=(0, 2, 0, 0), pad_edge=False, header_style="bold")
        table.add_column("characteristic", overflow="fold")
        for name in ("points", "signals", *(rule.label for rule in used)):
            table.add_column(name, justify="right", overflow="fold")
        spoke = sorted(np.flatnonzero(self.raised).tolist(), key=lambda row: (-int(self.raised[row]), row))
        for row in spoke[:SHOWN_CHARACTERISTICS]:
            cells = [self.points[row], self.raised[row], *(self.started[row, rule] for rule in used)]
            table.add_row(self.ids[row], *(f"{int(cell):,}" if cell else "" for cell in cells))
        if len(spoke) > SHOWN_CHARACTERISTICS:
            table.add_row(f"… {len(spoke) - SHOWN_CHARACTERISTICS:,} more with signals")
        silent = len(self.ids) - len(spoke)
        if silent:
            table.add_row(f"{silent:,} without a signal", style="dim")
        totals = [self.points.sum(), self.raised.sum(), *(self.started[:, rule].sum() for rule in used)]
        table.add_row("in all", *(f"{int(cell):,}" for cell in totals), style="bold")
        return table


def texts_of(column: NDArray[np.float64]) -> list[str]:
    """Return numbers as their shortest text that reads back the same, NaN as nothing."""
    return ["" if isnan(value) else repr(value) for value in column.tolist()]


class PointsFile:
    """Writes a line per point."""

    def __init__(self, file: TextIO, ids: Sequence[str]) -> None:
        self._file = file
        self._ids = ids
        self._rules: dict[int, str] = {}
        file.write(",".join(POINT_COLUMNS) + "\n")

    def write(self, points: Records) -> None:
        """Add the points of a chunk."""
        if not len(points):
            return
        for word in np.unique(points["bits"]).tolist():
            self._rules.setdefault(word, ";".join(rule.label for rule in rules_in(word)))
        columns = [[self._ids[row] for row in points["row"].tolist()]]
        columns.append([str(number) for number in points["number"].tolist()])
        columns.append([format_time(time) for time in points["time"].tolist()])
        columns += [texts_of(points[name]) for name in POINT_COLUMNS[3:-1]]
        columns.append([self._rules[word] for word in points["bits"].tolist()])
        self._file.write("\n".join(map(",".join, zip(*columns, strict=True))) + "\n")


def replay(
    settings: Settings,
    paths: Sequence[Path],
    *,
    points: Path | None = None,
    signals: Path | None = None,
    wide: bool = False,
    progress: Callable[[int, int], None] = lambda _readings, _bytes: None,
) -> Replayed:
    """Judge the readings of files in the order of the files and their rows.

    Writes a line per point to `points` and an event document per line to `signals`. `progress` is told readings and
    bytes done. Raises `DataError` for a file that cannot be read or written.
    """
    characteristics = settings.characteristics
    replayed = Replayed([characteristic.id for characteristic in characteristics])
    bank = Bank([characteristic.detector for characteristic in characteristics])
    herald = Herald(characteristics, settings.publish.source)
    history = History(characteristics, wide)
    begin = time.perf_counter()
    with ExitStack() as stack:
        points_file = PointsFile(opened(stack, points), replayed.ids) if points is not None else None
        signals_file = opened(stack, signals) if signals is not None else None
        done = 0
        for path in paths:
            for chunk in history.read(path):
                verdicts = bank.judge(chunk.readings)
                replayed.refuse(chunk.refusals)
                replayed.count(verdicts)
                if points_file is not None:
                    points_file.write(verdicts.points)
                if signals_file is not None:
                    for event in herald.events(verdicts):
                        signals_file.write(event.document.decode() + "\n")
                progress(int(replayed.outcomes.sum()), done + chunk.bytes_done)
            done += path.stat().st_size
    replayed.seconds = time.perf_counter() - begin
    return replayed


def opened(stack: ExitStack, path: Path) -> TextIO:
    """Open a file to be written. Raises `DataError`."""
    try:
        return stack.enter_context(path.open("w", encoding="utf-8", newline=""))
    except OSError as error:
        raise DataError(f"{path}: cannot be written: {error.strerror or error}") from None
