"""Payloads that are one number, as text: `12.5`."""

from collections.abc import Sequence
from typing import Final

from quietmill.intake.payloads.format import Refusal, Sample
from quietmill.model import NO_TIME, Outcome
from quietmill.numeral import number_text

__all__ = ["NumberReader"]

_NO_TEXT: Final = Refusal(Outcome.NOT_JSON, "a number as UTF-8 text")
_NO_NUMBER: Final = Refusal(Outcome.NOT_A_NUMBER, "a number such as 12.5 and nothing else")


class NumberReader:
    """Reads payloads that are nothing but a number; such messages tell neither time nor sequence."""

    @staticmethod
    def parse(payload: bytes) -> object:
        """Return the payload as text; what is empty or no UTF-8 (or begins with a byte order mark) is not JSON."""
        try:
            text = payload.decode()
        except UnicodeDecodeError:
            return _NO_TEXT
        return _NO_TEXT if not text or text.isspace() or text[0] == "\ufeff" else text

    def read(self, document: object, payload: bytes) -> Sequence[Sample | Refusal]:  # noqa: ARG002 (the protocol's)
        """Return the one reading."""
        number = number_text(document) if isinstance(document, str) else None
        return (_NO_NUMBER if number is None else (float(number), NO_TIME, NO_TIME),)
