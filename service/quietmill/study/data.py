"""DATA files as the readings that the bank takes.

Values are taken as collected: scale and offset of the settings have been applied before. Each row is a message of its
own, but adjacent rows of the same, non-empty `message` are one. A reading in a message of several is told from a
repeated one by a hash of the message's rows, where the live service hashes topic and payload.

A chunk is read column by column at once; where anything in it looks doubtful it is read again row by row, exactly,
and each bad row becomes a `Refusal` with its line. Both ways give the same readings.
"""

import re
from collections.abc import Generator, Iterator, Mapping, Sequence
from dataclasses import dataclass
from decimal import Decimal
from hashlib import blake2b
from pathlib import Path
from typing import Final, NamedTuple

import msgspec
import numpy as np
from numpy.typing import NDArray

from quietmill.instant import MILLISECONDS_FROM, from_number, parse_time
from quietmill.model import NO_TIME, OUT_OF_RANGE_SIGMAS, READING, Outcome, Records
from quietmill.numeral import number_text
from quietmill.settings import Characteristic
from quietmill.study.arrow import CleanColumns, read_clean
from quietmill.study.columns import Columns, read_columns

__all__ = ["Chunk", "History", "Refusal"]

LATEST_MILLISECONDS: Final = 10**14
LARGEST_SEQUENCE: Final = 2**63 - 1

PLAIN_TIMES: Final = re.compile(r"(?:[0-9]{4}-[0-9]{2}-[0-9]{2}T[0-9]{2}:[0-9]{2}:[0-9]{2}(?:\.[0-9]{1,6})?Z\n)+")
"""The commonest form of times, which numpy reads as this package does."""

whole_numbers: Final = msgspec.json.Decoder(list[int]).decode
numbers: Final = msgspec.json.Decoder(list[float]).decode


class Refusal(NamedTuple):
    """A row that gave no reading."""

    file: str
    line: int
    outcome: Outcome
    reason: str


@dataclass(frozen=True, slots=True)
class Chunk:
    """Readings from successive rows of a file, and the rows that gave none."""

    readings: Records
    refusals: Sequence[Refusal]
    bytes_done: int


class _DoubtError(Exception):
    """Something in a chunk needs reading row by row."""


def _instants(texts: Sequence[str]) -> NDArray[np.int64]:
    """Return times that all have one of the common forms."""
    try:
        if PLAIN_TIMES.fullmatch("\n".join(texts) + "\n"):
            return np.array([text[:-1] for text in texts], "M8[us]").astype(np.int64)
        found = np.array(whole_numbers("[" + ",".join(texts) + "]"), np.int64)
    except (ValueError, OverflowError):
        raise _DoubtError from None
    if len(found) != len(texts) or np.any(found < 0) or np.any(found > LATEST_MILLISECONDS):
        raise _DoubtError
    return np.where(found < MILLISECONDS_FROM, found * 1_000_000, found * 1000)


def _numbers(texts: Sequence[str]) -> NDArray[np.float64]:
    """Return numbers that all follow JSON's grammar and are finite."""
    try:
        found = np.array(numbers("[" + ",".join(texts) + "]"), np.float64)
    except ValueError:
        raise _DoubtError from None
    if len(found) != len(texts):
        raise _DoubtError
    return found


def _instant(text: str) -> int:
    """Return a time in any form. Raises `ValueError`."""
    number = number_text(text)
    return parse_time(text.strip()) if number is None else from_number(Decimal(number))


def _hash(content: str) -> int:
    return int.from_bytes(blake2b(content.encode(), digest_size=8).digest(), "big")


class History:
    """Reads DATA files for a plant's characteristics; rows of readings are positions in `characteristics`.

    Messages are numbered through all files that one `History` reads.
    """

    def __init__(self, characteristics: Sequence[Characteristic], wide: bool = False) -> None:
        self._rows: Mapping[str, int] = {characteristic.id: row for row, characteristic in enumerate(characteristics)}
        self._centre = np.array([characteristic.detector.centre for characteristic in characteristics], np.float64)
        self._sigma = np.array([characteristic.detector.sigma for characteristic in characteristics], np.float64)
        self._wide = wide
        self._messages = 0

    def read(self, path: Path) -> Iterator[Chunk]:
        """Yield the chunks of a file. Raises `columns.DataError` when it cannot be read at all."""
        done = 0 if self._wide else (yield from self._clean_chunks(path))
        if done is None:
            return
        for columns in read_columns(path, self._wide, done):
            refusals = [
                Refusal(str(path), line, Outcome.NO_MEMBER, "the row has too few cells") for line in columns.short
            ]
            try:
                readings, lines = self._at_once(columns), columns.lines
            except _DoubtError:
                readings, lines = self._row_by_row(str(path), columns, refusals)
            yield self._chunk(str(path), readings, lines, refusals, columns.bytes_done)

    def _clean_chunks(self, path: Path) -> Generator[Chunk, None, int | None]:
        """Yield chunks as long as nothing is doubtful; return after how many rows something was, or None at the end."""
        done = 0
        clean = read_clean(path, self._rows)
        while True:
            try:
                columns = next(clean)
            except StopIteration as end:
                return None if end.value else done
            readings = self._of_clean(columns)
            if self._far(readings).any():
                return done
            done += len(readings)
            yield Chunk(readings, [], columns.bytes_done)

    def _chunk(
        self, path: str, readings: Records, lines: Sequence[int], refusals: list[Refusal], bytes_done: int
    ) -> Chunk:
        """Return a chunk without the values that can be no measurement."""
        far = self._far(readings)
        if far.any():
            reason = f"the value is more than {OUT_OF_RANGE_SIGMAS:g} sigma from the centre"
            refusals += [
                Refusal(path, lines[index], Outcome.OUT_OF_RANGE, reason) for index in np.flatnonzero(far).tolist()
            ]
            readings = readings[~far]
        return Chunk(readings, sorted(refusals, key=lambda refusal: refusal.line), bytes_done)

    def _far(self, readings: Records) -> NDArray[np.bool_]:
        """Return which values can be no measurement."""
        row = readings["row"]
        return np.abs(readings["value"] - self._centre[row]) > OUT_OF_RANGE_SIGMAS * self._sigma[row]

    def _of_clean(self, columns: CleanColumns) -> Records:
        """Return the readings of columns that pyarrow has read."""
        readings = self._blank(len(columns.rows))
        readings["row"], readings["time"] = columns.rows, columns.time
        readings["value"] = columns.value + 0.0
        readings["fingerprint"] = readings["value"].view(np.uint64)
        return readings

    def _at_once(self, columns: Columns) -> Records:
        """Return the readings of columns in which nothing is doubtful."""
        if columns.message or not columns.lines:
            raise _DoubtError
        try:
            rows = [self._rows[name] for name in columns.characteristic]
        except KeyError:
            raise _DoubtError from None
        times, values = _instants(columns.time), _numbers(columns.value)
        sequences = _whole_numbers(columns.sequence) if columns.sequence else NO_TIME
        arrivals = _instants(columns.arrival) if columns.arrival else NO_TIME
        readings = self._blank(len(rows))
        readings["row"], readings["time"], readings["sequence"], readings["arrival"] = rows, times, sequences, arrivals
        readings["value"] = values + 0.0  # -0.0 becomes the 0.0 that it equals
        readings["fingerprint"] = readings["value"].view(np.uint64)
        return readings

    def _blank(self, count: int) -> Records:
        """Return readings without content, each a message of its own."""
        readings = np.zeros(count, READING)
        readings["sequence"] = readings["arrival"] = NO_TIME
        readings["message"] = np.arange(self._messages, self._messages + count)
        self._messages += count
        return readings

    def _row_by_row(self, path: str, columns: Columns, refusals: list[Refusal]) -> tuple[Records, list[int]]:
        """Return the readings of any columns with their lines; refuse each row that gives none."""
        count = len(columns.lines)
        sequences = columns.sequence or ("",) * count
        arrivals = columns.arrival or ("",) * count
        kept: list[tuple[int, int, int, int, float]] = []
        places: list[int] = []
        for place in range(count):
            name, value = columns.characteristic[place].strip(), columns.value[place]
            outcome, reason = Outcome.ACCEPTED, ""
            time = arrival = sequence = NO_TIME
            number = number_text(value)
            reading = float(number) if number is not None else np.nan
            row = self._rows.get(name)
            if row is None:
                outcome, reason = Outcome.UNROUTED, f"no characteristic is called {name[:128]!r}"
            elif not value.strip() or not columns.time[place].strip():
                outcome, reason = Outcome.NO_MEMBER, "time or value is empty"
            elif not np.isfinite(reading):
                outcome, reason = Outcome.NOT_A_NUMBER, f"the value must be a number, is {value[:40]!r}"
            else:
                try:
                    time = _instant(columns.time[place])
                    arrival = _instant(arrivals[place]) if arrivals[place].strip() else NO_TIME
                except (ValueError, ArithmeticError) as error:
                    outcome, reason = Outcome.BAD_TIME, f"the time {error}"
                if sequences[place].strip():
                    whole = number_text(sequences[place])
                    if whole is None or not whole.lstrip("-").isdigit() or abs(int(whole)) > LARGEST_SEQUENCE:
                        outcome = outcome or Outcome.NOT_A_NUMBER
                        reason = reason or f"the sequence must be a whole number, is {sequences[place][:40]!r}"
                    else:
                        sequence = int(whole)
            if outcome is Outcome.ACCEPTED and row is not None:
                kept.append((row, time, arrival, sequence, reading + 0.0))
                places.append(place)
            else:
                refusals.append(Refusal(path, columns.lines[place], outcome, reason))
        readings = self._blank(len(kept))
        if kept:
            for name, column in zip(
                ("row", "time", "arrival", "sequence", "value"), zip(*kept, strict=True), strict=True
            ):
                readings[name] = column
        readings["fingerprint"] = readings["value"].view(np.uint64)
        if columns.message:
            self._join_messages(columns, places, readings)
        return readings, [columns.lines[place] for place in places]

    @staticmethod
    def _join_messages(columns: Columns, places: Sequence[int], readings: Records) -> None:
        """Give adjacent rows of the same message one number and one fingerprint."""
        begin = 0
        names = columns.message
        while begin < len(names):
            end = begin + 1
            while names[begin] and end < len(names) and names[end] == names[begin]:
                end += 1
            if end - begin > 1:
                first, last = np.searchsorted(places, (begin, end))
                if last > first:
                    content = [
                        f"{columns.characteristic[place]},{columns.time[place]},{columns.value[place]}"
                        for place in range(begin, end)
                    ]
                    readings["message"][first:last] = readings["message"][first]
                    readings["fingerprint"][first:last] = _hash("\n".join(content))
            begin = end


def _whole_numbers(texts: Sequence[str]) -> NDArray[np.int64]:
    """Return whole numbers of at most 63 bits."""
    try:
        found = np.array(whole_numbers("[" + ",".join(texts) + "]"), np.int64)
    except (ValueError, OverflowError):
        raise _DoubtError from None
    if len(found) != len(texts) or np.any(found == NO_TIME):
        raise _DoubtError
    return found
