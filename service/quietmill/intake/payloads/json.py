"""JSON payloads: JSON Pointers say where in the message value, time and sequence stand.

Three questions that JSON leaves open are answered here. Of several members of one name the last counts. NaN,
Infinity and numbers too large for a double are not a number at the place where they stand, and leave the rest of
their message readable. Nesting deeper than `MAX_DEPTH` is not JSON.
"""

import json
from collections.abc import Sequence
from decimal import Decimal, InvalidOperation
from math import isfinite
from typing import Final

import msgspec

from quietmill.instant import from_float, from_number, parse_time
from quietmill.intake.payloads.format import Refusal, Sample
from quietmill.intake.pointer import MISSING, Pointer
from quietmill.model import NO_TIME, Outcome
from quietmill.numeral import number_text
from quietmill.settings import Payload

__all__ = ["MAX_DEPTH", "JsonReader"]

MAX_DEPTH: Final = 500
"""Levels of arrays and objects within one another: below what every supported interpreter decodes."""

_LARGEST_SEQUENCE: Final = 2**63 - 1
_DIGITS_OF_A_DOUBLE: Final = 400
"""A longer integer is beyond every double."""

_NOT_JSON: Final = Refusal(Outcome.NOT_JSON, "a JSON document in UTF-8")
_decode: Final = msgspec.json.Decoder().decode


class JsonReader:
    """Reads JSON messages by the pointers of one characteristic."""

    __slots__ = ("_array", "_parse_strings", "_sequence", "_time", "_unit", "_value")

    def __init__(self, payload: Payload) -> None:
        self._array = None if payload.array is None else Pointer(payload.array)
        self._value = Pointer(payload.value or "")
        self._time = None if payload.time is None else Pointer(payload.time)
        self._sequence = None if payload.sequence is None else Pointer(payload.sequence)
        self._unit = payload.time_unit
        self._parse_strings = payload.parse_strings

    @staticmethod
    def parse(payload: bytes) -> object:
        """Return the decoded document."""
        try:
            document = _decode(payload)
        except RecursionError:
            return _NOT_JSON
        except ValueError:  # msgspec's own errors among them
            document = _decode_carefully(payload)
        if len(payload) > 2 * MAX_DEPTH and _too_deep(document):
            return _NOT_JSON
        return document

    def read(self, document: object, payload: bytes) -> Sequence[Sample | Refusal]:
        """Return the readings at the pointers; none for an empty array."""
        try:
            return self._samples(document)
        except _DigitsLostError:
            return self._samples(_decode_carefully(payload))

    def _samples(self, document: object) -> Sequence[Sample | Refusal]:
        if self._array is None:
            return (self._sample(document, document),)
        items = self._array.find(document)
        if isinstance(items, list):
            return [self._sample(item, document) for item in items]
        return (Refusal(Outcome.NO_MEMBER, f"a list of readings at {self._array}"),)

    def _sample(self, item: object, root: object) -> Sample | Refusal:
        """Return the reading in one item; what is not in the item is looked for at the message's root."""
        value = self._value.find(item)
        if value is MISSING and (value := self._value.find(root)) is MISSING:
            return Refusal(Outcome.NO_MEMBER, f"a member at {self._value}")
        number = self._number(value)
        if number is None:
            return Refusal(Outcome.NOT_A_NUMBER, f"a number at {self._value}")
        time = sequence = NO_TIME
        if self._time is not None:
            instant = self._time.find(item)
            if instant is MISSING and (instant := self._time.find(root)) is MISSING:
                return Refusal(Outcome.NO_MEMBER, f"a time at {self._time}")
            try:
                time = self._instant(instant)
            except ValueError as error:
                return Refusal(Outcome.BAD_TIME, f"a time at {self._time}, which {error}")
        if self._sequence is not None:
            count = self._sequence.find(item)
            if count is MISSING and (count := self._sequence.find(root)) is MISSING:
                return Refusal(Outcome.NO_MEMBER, f"a sequence number at {self._sequence}")
            whole = self._whole(count)
            if whole is None:
                return Refusal(Outcome.NOT_A_NUMBER, f"a whole number of at most 63 bits at {self._sequence}")
            sequence = whole
        return (_to_float(number), time, sequence)

    def _number(self, member: object) -> float | Decimal | None:
        """Return a member that is a number, with all the digits it still has."""
        if isinstance(member, str) and self._parse_strings:
            text = number_text(member)
            return None if text is None else _exact(text)
        # true and false are integers to Python, but not to JSON.
        return member if isinstance(member, (float, int, Decimal)) and not isinstance(member, bool) else None

    def _instant(self, member: object) -> int:
        number = self._number(member)
        if number is None:
            if isinstance(member, str):
                return parse_time(member)
            raise ValueError("must be RFC 3339 text or a number")
        if isinstance(number, float) and isfinite(number):
            instant = from_float(number, self._unit)
            if instant is None:
                raise _DigitsLostError
            return instant
        return from_number(number, self._unit)

    def _whole(self, member: object) -> int | None:
        number = self._number(member)
        if isinstance(number, float) and isfinite(number):
            raise _DigitsLostError
        if number is None or not -_LARGEST_SEQUENCE <= number <= _LARGEST_SEQUENCE or number != int(number):
            return None
        return int(number)


class _DigitsLostError(Exception):
    """A time or sequence was decoded as a double where the digits that a double drops decide."""


def _decode_carefully(payload: bytes) -> object:
    """Return the document with every digit, and with what senders write although JSON does not know it.

    Slower than the other decoder by far, so only where lost digits decide and for what that one refuses.
    """
    try:
        return _careful.decode(payload.decode())
    except (ValueError, RecursionError):
        return _NOT_JSON


def _exact(text: str) -> Decimal:
    try:
        return Decimal(text)
    except InvalidOperation:  # an exponent of twenty digits
        return Decimal(float(text))


def _exact_integer(text: str) -> int | Decimal:
    return int(text) if len(text) <= _DIGITS_OF_A_DOUBLE else _exact(text)


_careful: Final = json.JSONDecoder(parse_float=_exact, parse_int=_exact_integer)


def _to_float(number: float | Decimal) -> float:
    try:
        return float(number)
    except OverflowError:
        return float("inf")


def _too_deep(document: object) -> bool:
    level = [document]
    for _ in range(MAX_DEPTH):
        level = [
            child
            for node in level
            if isinstance(node, (dict, list))
            for child in (node.values() if isinstance(node, dict) else node)
            if isinstance(child, (dict, list))
        ]
        if not level:
            return False
    return True
