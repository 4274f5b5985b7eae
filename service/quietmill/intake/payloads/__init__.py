"""Payload formats, one module each.

To add one: write a module with a class that keeps to `format.Reader` (`parse` once a message, `read` once a
characteristic), give it a name in `READERS`, and let `format_of` tell from the settings when it is meant. Its tests
go beside those of the others, and it joins the table of garbage that every format has to survive.
"""

from collections.abc import Callable, Mapping
from types import MappingProxyType
from typing import Final

from quietmill.intake.payloads.format import Reader, Refusal, Sample
from quietmill.intake.payloads.json import JsonReader
from quietmill.intake.payloads.number import NumberReader
from quietmill.settings import Payload

__all__ = ["READERS", "Reader", "Refusal", "Sample", "format_of", "reader_of"]

READERS: Final[Mapping[str, Callable[[Payload], Reader]]] = MappingProxyType(
    {
        "number": lambda _: NumberReader(),
        "json": JsonReader,
    }
)


def format_of(payload: Payload) -> str:
    """Return the name of the format that settings ask for: who says where a value stands expects JSON."""
    return "number" if payload.value is None else "json"


def reader_of(payload: Payload | None) -> Reader:
    """Return what reads the messages of one characteristic."""
    return NumberReader() if payload is None else READERS[format_of(payload)](payload)
