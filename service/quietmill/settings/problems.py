"""What is wrong with a settings file, said so that its author can mend it."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from difflib import get_close_matches

__all__ = ["Path", "Problem", "SettingsError", "nearest", "path_text"]

Path = tuple[str | int, ...]
"""Where in the file: keys and, in lists, positions."""


def path_text(path: Path) -> str:
    """Return a path as problems write it.

    >>> path_text(("characteristics", 3, "baseline", "sigma"))
    'characteristics[3].baseline.sigma'
    """
    text = ""
    for step in path:
        text += f"[{step}]" if isinstance(step, int) else f".{step}" if text else step
    return text


def nearest(word: str, known: Iterable[str]) -> str:
    """Return `; did you mean 'known'?` for a misspelt word, else the words that are known."""
    known = list(known)
    close = get_close_matches(word.lower(), known, n=1)
    return f"; did you mean '{close[0]}'?" if close else f"; known are {', '.join(known)}"


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
