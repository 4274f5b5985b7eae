"""Numbers in text, by the grammar of JSON: no `1_000`, no `infinity`, no `.5`."""

import re
from typing import Final

__all__ = ["number_text"]

_NUMBER: Final = re.compile(r"[ \t\r\n]*(-?(?:0|[1-9][0-9]*)(?:\.[0-9]+)?(?:[eE][+-]?[0-9]+)?)[ \t\r\n]*")


def number_text(text: str) -> str | None:
    """Return the number in a text without the white space around it, or None if by JSON's grammar it is none.

    >>> number_text(" -1.5e3 "), number_text("1_000")
    ('-1.5e3', None)
    """
    match = _NUMBER.fullmatch(text)
    return match and match[1]
