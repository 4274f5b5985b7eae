"""From a settings file to checked settings, or to everything that is wrong with it."""

import os
from collections.abc import Mapping, Sequence
from pathlib import Path as FilePath
from typing import Any, Final, TypeVar

from pydantic import BaseModel, ValidationError

from quietmill.settings.characteristic import Characteristic
from quietmill.settings.entries import Entry, defaults_of, entries_of
from quietmill.settings.overrides import OPTION, override
from quietmill.settings.plant import Broker, Publish, Record, Settings, Web
from quietmill.settings.problems import Path, Problem, SettingsError, nearest, path_text, shown
from quietmill.settings.source import Source, read_text
from quietmill.settings.tree import read_tree
from quietmill.settings.wording import problems_of

__all__ = ["load"]

KEYS: Final = ("broker", "record", "web", "publish", "defaults", "characteristics")
Part = TypeVar("Part", bound=BaseModel)
FILES: Final = ("password_file", "ca_file", "certificate_file", "key_file")


class Checking:
    """The checking of one settings file; what is wrong gathers in its source."""

    def __init__(self, source: Source) -> None:
        self.source = source
        self.reported: set[tuple[Path, str]] = set()

    def refuse(self, path: Path, message: str) -> None:
        """Report once: the members of a family share their place, and all characteristics the defaults."""
        if (path, message) not in self.reported:
            self.reported.add((path, message))
            self.source.report(path, message)

    def part(self, name: str, model: type[Part], given: Any) -> Part | None:
        """Return a checked part of the settings, or None where it was refused."""
        if not isinstance(given, dict):
            self.refuse((name,), f"must hold keys and values, indented below it, is {shown(given)}")
            return None
        try:
            return model.model_validate(given)
        except ValidationError as error:
            for path, message in problems_of(error, model):
                self.refuse((name, *path), message)
            return None

    def broker(self) -> Broker | None:
        """Return how to reach the broker, with paths from the settings file's folder, of files that can be read."""
        broker = self.part("broker", Broker, self.source.tree.get("broker", {}))
        if broker is None:
            return None
        files: dict[str, FilePath] = {}
        for key in FILES:
            if (named := getattr(broker, key)) is None:
                continue
            files[key] = path = FilePath(self.source.file).parent / named
            try:
                with path.open("rb"):
                    pass
            except OSError as error:
                self.refuse(("broker", key), f"{os.fspath(path)} cannot be read: {(error.strerror or '').lower()}")
        return broker.model_copy(update=files)

    def characteristics(self, entries: Sequence[Entry], defaults: Mapping[str, Any]) -> list[Characteristic]:
        """Return the characteristics of all entries that are in order."""
        places: dict[str, Path] = {}
        found: list[Characteristic] = []
        for entry in entries:
            name = entry.keys.get("id")
            if isinstance(name, str):
                if name in places:
                    self.refuse_twice(entry, name, places[name])
                places.setdefault(name, entry.path)
            try:
                found.append(Characteristic.model_validate(entry.keys))
            except ValidationError as error:
                for path, message in problems_of(error, Characteristic):
                    self.refuse_in(entry, path, message, defaults)
        return found

    def refuse_twice(self, entry: Entry, name: str, first: Path) -> None:
        """Report an id that two characteristics have, or a family whose members are all called alike."""
        if "family" not in self.source.tree["characteristics"][entry.path[1]]:
            self.refuse((*entry.path, "id"), f"{name} stands twice, first in line {self.source.line(first)}")
        elif first == entry.path:
            self.refuse((*entry.path, "family"), f"several members are called {name}; use every name of each in it")
        else:
            message = f"its member {name} stands twice, first in line {self.source.line(first)}"
            self.refuse((*entry.path, "family"), message)

    def refuse_in(self, entry: Entry, path: Path, message: str, defaults: Mapping[str, Any]) -> None:
        """Report what is wrong within an entry where it comes from: there, the defaults, or an override."""
        text = entry.overriding(path)
        if text is None:
            self.refuse(entry.place(path, defaults), message)
            return
        where = path_text(path)
        named = where in text.partition("=")[0]
        problem = Problem(f"{OPTION} {text}", 0, () if named else path, message)
        if problem not in self.source.problems:
            self.source.problems.append(problem)

    def outside(self, entries: Sequence[Entry], prefix: str) -> None:
        """Refuse topics on which the service itself speaks."""
        for entry in entries:
            if str(entry.keys.get("topic")).startswith(f"{prefix}/"):
                message = f"lies under {prefix}/, where quietmill itself publishes; choose another publish.prefix"
                self.refuse_in(entry, ("topic",), message, {})


def load(path: FilePath, overrides: Sequence[str] = ()) -> Settings:
    """Read and check a settings file; `overrides` such as `press1.force.cusum.h=6` replace single settings.

    Raises `SettingsError` with all that is wrong: file, line, path and remedy.
    """
    source = Source(str(path))
    tree = source.tree = read_tree(read_text(path), source)
    if not isinstance(tree, dict):
        message = f"must hold keys such as broker and characteristics, is {shown(tree)}"
        raise SettingsError([Problem(source.file, source.line(()), (), message)])
    checking = Checking(source)
    for key in tree:
        if key not in KEYS:
            checking.refuse((key,), f"is no key of the settings{nearest(key, KEYS)}")
    broker = checking.broker()
    web = checking.part("web", Web, tree.get("web", {}))
    publish = checking.part("publish", Publish, tree.get("publish", {}))
    record = tree.get("record")
    if isinstance(record, str):
        record = {"url": record}
    kept = checking.part("record", Record, record) if "record" in tree else None
    defaults = defaults_of(source)
    entries = list(entries_of(source, defaults))
    source.problems += override(entries, overrides)
    characteristics = checking.characteristics(entries, defaults)
    if publish is not None:
        checking.outside(entries, publish.prefix)
    if source.problems or broker is None or web is None or publish is None:
        raise SettingsError(sorted(source.problems, key=lambda problem: problem.line))
    return Settings(
        path=path,
        broker=broker,
        record=kept.url if kept else None,
        web=web,
        publish=publish,
        characteristics=tuple(characteristics),
    )
