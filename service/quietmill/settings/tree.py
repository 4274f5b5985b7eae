"""YAML text as a plain tree of dict, list, text, number, true, false and null.

YAML 1.2 core schema: `no` and `on` are texts, `1e-3` is a number. Tags are refused, keys are texts and must not
repeat, aliases work within a bound. The text is read once, event by event, so that nothing large can come of
something small before it is refused.
"""

import re
from collections.abc import Iterator
from typing import Any, Final, NoReturn

from ruamel.yaml import YAML
from ruamel.yaml.error import MarkedYAMLError, YAMLError
from ruamel.yaml.events import (
    AliasEvent,
    CollectionStartEvent,
    DocumentEndEvent,
    DocumentStartEvent,
    Event,
    MappingEndEvent,
    NodeEvent,
    ScalarEvent,
    SequenceEndEvent,
    SequenceStartEvent,
)
from ruamel.yaml.reader import ReaderError

from quietmill.settings.problems import Path, Problem, SettingsError
from quietmill.settings.source import Source

__all__ = ["read_tree", "scalar"]

MAX_ALIASED: Final = 10_000
"""Values that may come into being through aliases: enough for every honest use, too few for a bomb."""

MAX_DEPTH: Final = 50
NULL: Final = re.compile(r"null|Null|NULL|~|")
TRUE: Final = re.compile(r"true|True|TRUE")
FALSE: Final = re.compile(r"false|False|FALSE")
INTEGER: Final = re.compile(r"[-+]?[0-9]+")
OCTAL: Final = re.compile(r"0o[0-7]+")
HEXADECIMAL: Final = re.compile(r"0x[0-9a-fA-F]+")
FLOAT: Final = re.compile(r"[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?")
INFINITE: Final = re.compile(r"[-+]?\.(inf|Inf|INF)")
NOT_A_NUMBER: Final = re.compile(r"\.(nan|NaN|NAN)")
MAX_DIGITS: Final = 300
"""A longer whole number would not be finite, and stays text."""


def scalar(text: str) -> Any:
    """Return what a plain scalar stands for (YAML 1.2.2, section 10.3.2).

    >>> [scalar(text) for text in ("no", "1e-3", "0x1F", "~", "True")]
    ['no', 0.001, 31, None, True]
    """
    if NULL.fullmatch(text):
        return None
    if TRUE.fullmatch(text):
        return True
    if FALSE.fullmatch(text):
        return False
    if len(text) <= MAX_DIGITS:
        if INTEGER.fullmatch(text):
            return int(text)
        if OCTAL.fullmatch(text):
            return int(text, 8)
        if HEXADECIMAL.fullmatch(text):
            return int(text, 16)
    if FLOAT.fullmatch(text):
        return float(text)
    if INFINITE.fullmatch(text):
        return float("-inf" if text[0] == "-" else "inf")
    if NOT_A_NUMBER.fullmatch(text):
        return float("nan")
    return text


def read_tree(text: str, source: Source) -> Any:
    """Return what a YAML text stands for; lines, and keys that stand twice, go to the source.

    Raises `SettingsError` with file and line where the text is no YAML or too much of it.
    """
    try:
        return Tree(source, YAML(typ="safe", pure=True).parse(text)).document()
    except YAMLError as error:
        raise SettingsError([syntax_problem(source.file, text, error)]) from None
    except (RecursionError, ValueError, TypeError, AttributeError, AssertionError, LookupError) as error:
        # slips of the YAML reader itself, on malformed directives and escapes
        raise SettingsError([Problem(source.file, 0, (), f"is not YAML: {error}")]) from None


def syntax_problem(file: str, text: str, error: YAMLError) -> Problem:
    """Put what the YAML reader found into one line."""
    line, message = 0, (str(error) or "unknown").splitlines()[0]
    if isinstance(error, ReaderError):
        line = text[: error.position].count("\n") + 1 if isinstance(error.position, int) else 0
        return Problem(file, line, (), "holds a character that no YAML text has; is it a binary file?")
    if isinstance(error, MarkedYAMLError):
        mark = error.problem_mark or error.context_mark
        line = mark.line + 1 if mark else 0
        message = ": ".join(part for part in (error.context, error.problem) if part)
    if "'\\t'" in message or "tab" in message:
        message = "a tab stands where only spaces may; indent with spaces"
    elif "mapping values are not allowed" in message:
        message = "a second ': ' stands in one line; put the text in quotes, or check the indentation above"
    elif "'@'" in message or "'`'" in message or "'%'" in message:
        message = f"{message.rpartition(': ')[2]}; put the text in quotes"
    return Problem(file, line, (), f"is not YAML: {message}")


class Tree:
    """Builds the plain tree of a source from the events of its YAML."""

    def __init__(self, source: Source, events: Iterator[Any]) -> None:
        self.source = source
        self.events = events
        self.values = 0
        self.aliased = 0
        self.anchors: dict[str, tuple[Any, int, Path] | None] = {}

    def refuse(self, event: Event, path: Path, message: str) -> NoReturn:
        """End the reading."""
        raise SettingsError([Problem(self.source.file, event.start_mark.line + 1, path, message)])

    def document(self) -> Any:
        """Return what the one document of the text stands for."""
        tree: Any = None
        documents = 0
        for event in self.events:
            if isinstance(event, DocumentStartEvent):
                documents += 1
                if documents > 1:
                    self.refuse(event, (), "a second YAML document (---) begins here; settings are one")
            elif isinstance(event, NodeEvent):
                tree = self.build(event, ())
            elif isinstance(event, DocumentEndEvent):
                self.anchors.clear()
        return tree

    def build(self, event: NodeEvent, path: Path) -> Any:
        """Return what begins with an event, and note the lines of all that is in it."""
        self.source.lines.setdefault(path, event.start_mark.line + 1)
        if isinstance(event, AliasEvent):
            return self.alias(event, path)
        if len(path) > MAX_DEPTH:
            self.refuse(event, path[:3], f"is nested more than {MAX_DEPTH} levels deep; settings never are")
        if getattr(event, "tag", None) is not None:
            self.refuse(event, path, "tags (words that begin with '!') are refused; write the plain value")
        before = self.values
        self.values += 1
        if event.anchor is not None:
            self.anchors[event.anchor] = None
        if isinstance(event, ScalarEvent):
            value = scalar(event.value) if event.style in {None, ""} else event.value
        elif isinstance(event, SequenceStartEvent):
            value = self.sequence(path)
        else:
            value = self.mapping(path)
        if event.anchor is not None:
            self.anchors[event.anchor] = (value, self.values - before, path)
        return value

    def alias(self, event: AliasEvent, path: Path) -> Any:
        """Return the very value that an alias stands for, as long as all of them together stand for little."""
        if event.anchor not in self.anchors:
            self.refuse(event, path, f"there is no anchor &{event.anchor} before this alias")
        anchored = self.anchors[event.anchor]
        if anchored is None:
            self.refuse(event, path, "an alias stands within what it stands for")
        value, size, origin = anchored
        self.values += size
        self.aliased += size
        if self.aliased > MAX_ALIASED:
            message = f"aliases stand for more than {MAX_ALIASED:,} values; write them out, or use a family"
            self.refuse(event, path, message)
        self.source.origins[path] = origin
        return value

    def sequence(self, path: Path) -> list[Any]:
        """Return the items of a list."""
        items: list[Any] = []
        while not isinstance(event := next(self.events), SequenceEndEvent):
            items.append(self.build(event, (*path, len(items))))
        return items

    def mapping(self, path: Path) -> dict[str, Any]:
        """Return the members of a mapping; a key that stands twice is a problem and the first counts."""
        members: dict[str, Any] = {}
        while not isinstance(key := next(self.events), MappingEndEvent):
            if not isinstance(key, ScalarEvent):
                remedy = "quote a text that begins with a brace or bracket"
                what = "is a list or a mapping" if isinstance(key, CollectionStartEvent) else "is an alias"
                self.refuse(key, path, f"a key must be a word, {what}; {remedy}")
            if key.tag is not None:
                self.refuse(key, path, "tags (words that begin with '!') are refused; write the plain value")
            name, line = key.value, key.start_mark.line + 1
            here = (*path, name)
            if key.anchor is not None:
                self.anchors[key.anchor] = (name, 1, here)
            if name == "<<" and key.style in {None, ""}:
                self.refuse(key, path, "merge keys (<<) are YAML 1.1; use defaults or a family")
            if name in members:
                message = f"stands twice, first in line {self.source.lines[here]}; keep one"
                self.source.problems.append(Problem(self.source.file, line, here, message))
                lines = self.source.lines
                self.source.lines = {}
                self.build(next(self.events), here)
                self.source.lines = lines
            else:
                self.source.lines[here] = line
                members[name] = self.build(next(self.events), here)
        return members
