"""The YAML text as a plain tree, with the line of everything in it.

YAML 1.2 core schema: `no` and `on` are texts, `1e-3` is a number. Tags are refused, keys are texts and must not
repeat, aliases work within a bound.
"""

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path as FilePath
from typing import Any, Final

from ruamel.yaml import YAML
from ruamel.yaml.error import MarkedYAMLError, YAMLError
from ruamel.yaml.nodes import MappingNode, Node, ScalarNode, SequenceNode
from ruamel.yaml.tokens import (
    BlockEndToken,
    BlockMappingStartToken,
    BlockSequenceStartToken,
    FlowMappingEndToken,
    FlowMappingStartToken,
    FlowSequenceEndToken,
    FlowSequenceStartToken,
    TagToken,
)

from quietmill.settings.problems import Path, Problem, SettingsError

__all__ = ["Source", "read_source", "read_text", "scalar"]

MAX_FILE_BYTES: Final = 64 * 1024 * 1024
MAX_ALIASED: Final = 10_000
"""Values that may come into being through aliases: enough for every honest use, too few for a bomb."""

MAX_DEPTH: Final = 50
OPENING: Final = (BlockMappingStartToken, BlockSequenceStartToken, FlowMappingStartToken, FlowSequenceStartToken)
CLOSING: Final = (BlockEndToken, FlowMappingEndToken, FlowSequenceEndToken)

NULL: Final = re.compile(r"null|Null|NULL|~|")
TRUE: Final = re.compile(r"true|True|TRUE")
FALSE: Final = re.compile(r"false|False|FALSE")
INTEGER: Final = re.compile(r"[-+]?[0-9]+")
OCTAL: Final = re.compile(r"0o[0-7]+")
HEXADECIMAL: Final = re.compile(r"0x[0-9a-fA-F]+")
FLOAT: Final = re.compile(r"[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?")
INFINITE: Final = re.compile(r"[-+]?\.(inf|Inf|INF)")
NOT_A_NUMBER: Final = re.compile(r"\.(nan|NaN|NAN)")
MAX_DIGITS: Final = 400


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
    if INTEGER.fullmatch(text) and len(text) <= MAX_DIGITS:
        return int(text)
    if OCTAL.fullmatch(text) and len(text) <= MAX_DIGITS:
        return int(text, 8)
    if HEXADECIMAL.fullmatch(text) and len(text) <= MAX_DIGITS:
        return int(text, 16)
    if FLOAT.fullmatch(text):
        return float(text)
    if INFINITE.fullmatch(text):
        return float("-inf" if text[0] == "-" else "inf")
    if NOT_A_NUMBER.fullmatch(text):
        return float("nan")
    return text


@dataclass(slots=True)
class Source:
    """A settings file as read: `tree` of dict, list, text, number, true, false and null; `lines` by path."""

    file: str
    tree: Any = None
    lines: dict[Path, int] = field(default_factory=dict[Path, int])
    problems: list[Problem] = field(default_factory=list[Problem])

    def line(self, path: Path) -> int:
        """Return the line of a path, or of the nearest thing around it."""
        while path and path not in self.lines:
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
        if path.is_file() and path.stat().st_size > MAX_FILE_BYTES:
            raise refuse(f"is larger than {MAX_FILE_BYTES >> 20} MiB; settings never are")
        content = path.read_bytes()
    except FileNotFoundError:
        raise refuse("there is no such file") from None
    except IsADirectoryError:
        raise refuse("is a folder; name the YAML file in it") from None
    except (OSError, ValueError) as error:
        raise refuse(f"cannot be read: {getattr(error, 'strerror', None) or error}") from None
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = content[: error.start].count(b"\n") + 1
        raise refuse("is not UTF-8 text; save the file as UTF-8", line) from None
    if not text.strip():
        raise refuse("is empty; config/minimal.yaml shows the least that is needed")
    return text


def syntax_problem(file: str, error: YAMLError) -> Problem:
    """Put what the YAML reader found into one line."""
    line, message = 0, str(error).splitlines()[0] if str(error) else "is not YAML"
    if isinstance(error, MarkedYAMLError):
        mark = error.problem_mark or error.context_mark
        line = mark.line + 1 if mark else 0
        message = ": ".join(part for part in (error.context, error.problem) if part)
    elif hasattr(error, "character"):
        message = "holds a character that no text has; is it a binary file?"
    if "\\t" in message or "tab" in message:
        message = "indent with spaces: YAML takes no tabs there"
    return Problem(file, line, (), f"is not YAML: {message}")


def refuse_early(source: Source, text: str) -> None:
    """Refuse tags and deep nesting before anything is built of them."""
    depth = 0
    for token in YAML(typ="safe", pure=True).scan(text):
        depth += isinstance(token, OPENING) - isinstance(token, CLOSING)
        message = ""
        if isinstance(token, TagToken):
            message = "tags (words that begin with '!') are refused; write the plain value"
        elif depth > MAX_DEPTH:
            message = f"is nested more than {MAX_DEPTH} levels deep; settings never are"
        if message:
            raise SettingsError([Problem(source.file, token.start_mark.line + 1, (), message)])


def read_source(path: FilePath) -> Source:
    """Read a settings file. Raises `SettingsError` with file and line when it is no YAML mapping."""
    text = read_text(path)
    source = Source(str(path))
    try:
        refuse_early(source, text)
        root = YAML(typ="safe", pure=True).compose(text)
    except YAMLError as error:
        raise SettingsError([syntax_problem(source.file, error)]) from None
    except (RecursionError, ValueError, TypeError, AttributeError, AssertionError, LookupError) as error:
        # slips of the reader itself, on malformed directives and escapes
        raise SettingsError([Problem(source.file, 0, (), f"is not YAML: {error}")]) from None
    if not isinstance(root, MappingNode):
        found = "a list" if isinstance(root, SequenceNode) else "a single value" if root else "nothing"
        message = f"must hold keys such as broker and characteristics, holds {found}"
        raise SettingsError([Problem(source.file, 1, (), message)])
    source.tree = Tree(source).build(root, ())
    return source


class Tree:
    """Builds the plain tree of a source from the nodes of its YAML."""

    def __init__(self, source: Source) -> None:
        self.source = source
        self.seen: set[int] = set()
        self.open: set[int] = set()
        self.aliased = 0

    def build(self, node: Node, path: Path, aliased: bool = False) -> Any:
        """Return what a node stands for, and note the lines of all that is in it."""
        self.source.lines.setdefault(path, node.start_mark.line + 1)
        aliased = aliased or (id(node) in self.seen and not isinstance(node, ScalarNode))
        self.seen.add(id(node))
        self.aliased += aliased
        if self.aliased > MAX_ALIASED:
            message = f"aliases stand for more than {MAX_ALIASED:,} values; write them out, or use a family"
            raise SettingsError([Problem(self.source.file, self.source.line(path), path, message)])
        if isinstance(node, ScalarNode):
            return scalar(node.value) if node.style in {None, ""} else node.value
        if id(node) in self.open:
            message = "an alias stands within what it stands for"
            raise SettingsError([Problem(self.source.file, self.source.line(path), path, message)])
        self.open.add(id(node))
        if isinstance(node, SequenceNode):
            built: Any = [self.build(item, (*path, place), aliased) for place, item in enumerate(node.value)]
        else:
            built = self.mapping(node, path, aliased)
        self.open.discard(id(node))
        return built

    def mapping(self, node: Node, path: Path, aliased: bool) -> Mapping[str, Any]:
        """Return a mapping node's members; a key that stands twice is a problem and the first counts."""
        members: dict[str, Any] = {}
        for key, value in node.value:
            if not isinstance(key, ScalarNode):
                self.source.report(path, "a key must be a word, is a list or a mapping")
                continue
            name = key.value
            here = (*path, name)
            if name == "<<" and key.style in {None, ""}:
                self.source.report(path, "merge keys (<<) are YAML 1.1; use defaults or a family")
            elif name in members:
                message = f"stands twice, first in line {self.source.lines[here]}; keep one"
                self.source.problems.append(Problem(self.source.file, key.start_mark.line + 1, here, message))
            else:
                self.source.lines[here] = key.start_mark.line + 1
                members[name] = self.build(value, here, aliased)
        return members
