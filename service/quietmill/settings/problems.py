"""What is wrong with a settings file, said so that its author can mend it."""

import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from difflib import get_close_matches
from functools import lru_cache
from typing import Any, Final

__all__ = ["Path", "Problem", "SettingsError", "nearest", "path_text", "shown"]

Path = tuple[str | int, ...]
"""Where in the file: keys and, in lists, positions."""

WORD: Final = re.compile(r"[A-Za-z0-9_-]{1,64}")
MAX_SHOWN: Final = 80
MAX_LISTED: Final = 12


def path_text(path: Path) -> str:
    """Return a path as problems write it; a key that is no plain word stands in brackets.

    >>> path_text(("characteristics", 3, "baseline", "sigma"))
    'characteristics[3].baseline.sigma'
    >>> path_text(("labels", "shift lead"))
    "labels['shift lead']"
    """
    text = ""
    for step in path:
        if isinstance(step, int):
            text += f"[{step}]"
        elif WORD.fullmatch(step):
            text += f".{step}" if text else step
        else:
            text += f"[{shown(step)}]"
    return text


def shown(value: Any) -> str:
    """Return a value as its author may recognise it, on one line and not too long.

    >>> [shown(value) for value in (-2.0, "high", None, True, [1, 2], {})]
    ['-2.0', "'high'", 'nothing', 'true', 'a list', 'keys and values']
    """
    if value is None:
        return "nothing"
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, (str, int, float)):
        text = repr(value)
        return text if len(text) <= MAX_SHOWN else f"{text[:MAX_SHOWN]}…"
    return "a list" if isinstance(value, (list, tuple)) else "keys and values"


def nearest(word: str, known: Iterable[str]) -> str:
    """Return `; did you mean 'known'?` for a misspelt word, else the words that are known.

    >>> nearest("basline", ["baseline", "topic"])
    "; did you mean 'baseline'?"
    """
    return nearest_of(word, tuple(known))


@lru_cache(maxsize=4096)  # a slip is often made once and copied to a thousand entries
def nearest_of(word: str, known: tuple[str, ...]) -> str:
    close = get_close_matches(word.lower(), known, n=1) or get_close_matches(word, known, n=1)
    if close:
        return f"; did you mean {close[0]!r}?"
    more = f" and {len(known) - MAX_LISTED:,} more" if len(known) > 2 * MAX_LISTED else ""
    return f"; known are {', '.join(known[:MAX_LISTED] if more else known)}{more}"


@dataclass(frozen=True, slots=True)
class Problem:
    """One thing that is wrong: file, line (from 1; 0 for the file as a whole), path and remedy."""

    file: str
    line: int
    path: Path
    message: str

    def __str__(self) -> str:
        place = f"{self.file}:{self.line}" if self.line else self.file
        where = path_text(self.path)
        return f"{place}: {where}: {self.message}" if where else f"{place}: {self.message}"


class SettingsError(Exception):
    """The settings cannot be used; `problems` lists all that is wrong, in the order of the file."""

    def __init__(self, problems: Sequence[Problem]) -> None:
        self.problems = list(problems)
        super().__init__("\n".join(map(str, self.problems)))
