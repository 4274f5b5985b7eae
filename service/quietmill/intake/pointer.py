"""JSON Pointers (RFC 6901): where in a decoded message a value stands."""

import re
from typing import Final

__all__ = ["MISSING", "Pointer"]


class _Missing:
    """The type of `MISSING`."""

    def __repr__(self) -> str:
        return "MISSING"


MISSING: Final = _Missing()
"""What a pointer finds where there is nothing; JSON's null is something."""

_INDEX: Final = re.compile(r"0|[1-9][0-9]{0,17}")
_BAD_ESCAPE: Final = re.compile(r"~(?![01])")


class Pointer:
    """One pointer, taken apart once and followed through many messages.

    The empty text points to the whole document. Raises `ValueError` for text that is no pointer.

    >>> Pointer("/kilns/1/temperature").find({"kilns": [{}, {"temperature": 1180.5}]})
    1180.5
    """

    __slots__ = ("text", "tokens")

    def __init__(self, text: str) -> None:
        if text and not text.startswith("/"):
            raise ValueError(f"a JSON Pointer must be empty or begin with /, is {text!r}")
        if _BAD_ESCAPE.search(text):
            raise ValueError(f"in a JSON Pointer ~ must be written ~0, and / within a name ~1, is {text!r}")
        self.text = text
        self.tokens = tuple(token.replace("~1", "/").replace("~0", "~") for token in text.split("/")[1:])

    def find(self, document: object) -> object:
        """Return what stands at the pointer, or `MISSING`."""
        for token in self.tokens:
            if isinstance(document, dict):
                document = document.get(token, MISSING)
            elif isinstance(document, list) and _INDEX.fullmatch(token) and int(token) < len(document):
                document = document[int(token)]
            else:
                return MISSING
        return document

    def __str__(self) -> str:
        return self.text or "the root of the message"
