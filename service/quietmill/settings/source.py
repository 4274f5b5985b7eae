"""A settings file as read: the plain tree, the line of everything in it, and what is wrong."""

from dataclasses import dataclass, field
from pathlib import Path as FilePath
from typing import Any, Final

from quietmill.settings.problems import Path, Problem, SettingsError

__all__ = ["Source", "read_text"]

MAX_FILE_BYTES: Final = 64 * 1024 * 1024


@dataclass(slots=True)
class Source:
    """A settings file: `tree` of dict, list, text, number, true, false and null; `lines` by path.

    `origins` says for the path of an alias where its value was written.
    """

    file: str
    tree: Any = None
    lines: dict[Path, int] = field(default_factory=dict[Path, int])
    origins: dict[Path, Path] = field(default_factory=dict[Path, Path])
    problems: list[Problem] = field(default_factory=list[Problem])

    def line(self, path: Path) -> int:
        """Return the line of a path, or of the nearest thing around it."""
        while path and path not in self.lines:
            for length in range(len(path) - 1, 0, -1):
                if path[:length] in self.origins:
                    return self.line((*self.origins[path[:length]], *path[length:]))
            path = path[:-1]
        return self.lines.get(path, 0)

    def report(self, path: Path, message: str) -> None:
        """Add a problem at a path."""
        self.problems.append(Problem(self.file, self.line(path), path, message))


def read_text(path: FilePath) -> str:
    """Return the text of a settings file. Raises `SettingsError` where there is none to read."""

    def refuse(message: str, line: int = 0) -> SettingsError:
        return SettingsError([Problem(str(path), line, (), message)])

    try:
        if path.is_dir():
            raise refuse("is a folder; name the YAML file in it")
        with path.open("rb") as file:
            content = file.read(MAX_FILE_BYTES + 1)
    except FileNotFoundError:
        raise refuse("there is no such file") from None
    except (OSError, ValueError) as error:
        raise refuse(f"cannot be read: {getattr(error, 'strerror', None) or error}") from None
    if len(content) > MAX_FILE_BYTES:
        raise refuse(f"is larger than {MAX_FILE_BYTES >> 20} MiB; settings never are")
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content[: error.start].count(b"\n") + 1
        raise refuse("is not UTF-8 text; save the file as UTF-8", line) from None
    if not text.strip():
        raise refuse("is empty; config/minimal.yaml shows the least that is needed")
    return text
