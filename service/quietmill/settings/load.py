"""From a settings file to checked settings, or to everything that is wrong with it."""

import os
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path as FilePath
from typing import Any, Final

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from quietmill.settings.characteristic import Baseline, Characteristic, CusumForm, EwmaForm, Payload, Specification
from quietmill.settings.families import FamilyError, members
from quietmill.settings.overrides import override
from quietmill.settings.plant import Broker, Publish, Settings, Web, record_of
from quietmill.settings.problems import Path, SettingsError, nearest
from quietmill.settings.source import Source, read_source

__all__ = ["load"]

PARTS: Final[Mapping[str, type[BaseModel]]] = {"broker": Broker, "web": Web, "publish": Publish}
INNER: Final[Mapping[str, type[BaseModel]]] = {
    "payload": Payload,
    "baseline": Baseline,
    "ewma": EwmaForm,
    "cusum": CusumForm,
    "specification": Specification,
}
KEYS: Final = ("broker", "record", "web", "publish", "defaults", "characteristics")
OWN: Final = frozenset({"id", "topic", "family", "each"})
"""What no two characteristics share, and defaults therefore cannot give."""
FILES: Final = ("password_file", "ca_file", "certificate_file", "key_file")


def keys_of(model: type[BaseModel]) -> list[str]:
    """Return the keys of a part of the settings as the file writes them."""
    return [info.alias or name for name, info in model.model_fields.items()]


def in_words(error: ErrorDetails, keys: Sequence[str]) -> str:
    """Say a validation error in plain words; `keys` are those known where it arose."""
    kind, value, limits = error["type"], error.get("input"), error.get("ctx", {})
    shown = repr(value) if isinstance(value, (str, int, float, bool)) or value is None else type(value).__name__
    match kind:
        case "extra_forbidden":
            return f"is no key here{nearest(str(error['loc'][-1]), keys)}"
        case "missing":
            return "is missing"
        case "greater_than":
            return f"must be greater than {limits['gt']:g}, is {shown}"
        case "greater_than_equal":
            return f"must be at least {limits['ge']:g}, is {shown}"
        case "less_than_equal":
            return f"must be at most {limits['le']:g}, is {shown}"
        case "finite_number":
            return f"must be a finite number, is {shown}"
        case "float_type" | "float_parsing":
            return f"must be a number, is {shown}"
        case "int_type" | "int_from_float" | "int_parsing_size":
            return f"must be a whole number, is {shown}"
        case "model_type" | "model_attributes_type" | "dict_type":
            return f"must hold keys and values, is {shown}"
        case "string_too_short":
            return "must not be empty"
        case "value_error":
            return str(limits["error"])
        case _:
            return f"{error['msg'].lower()}, is {shown}"


def problems_of(error: ValidationError, model: type[BaseModel]) -> Iterator[tuple[Path, str]]:
    """Yield where and what, for each thing that a model refused."""
    for detail in error.errors(include_url=False):
        path = tuple(step for step in detail["loc"] if not (isinstance(step, str) and step.endswith("]")))
        inner = INNER.get(str(path[0])) if len(path) > 1 else None
        yield path, in_words(detail, keys_of(inner or model))


class Reading:
    """One reading of a settings file; what is wrong gathers in its source."""

    def __init__(self, source: Source) -> None:
        self.source = source
        self.reported: set[tuple[Path, str]] = set()

    def refuse(self, path: Path, message: str) -> None:
        """Report once; the members of a family share their places."""
        if (path, message) not in self.reported:
            self.reported.add((path, message))
            self.source.report(path, message)

    def part(self, name: str) -> Any:
        """Return a checked part of the settings, or None where it was refused."""
        model, given = PARTS[name], self.source.tree.get(name, {})
        if not isinstance(given, dict):
            self.refuse((name,), f"must hold keys and values, is {given!r}")
            return None
        if name == "broker":
            given = self.with_files(given)
        try:
            return model.model_validate(given)
        except ValidationError as error:
            for path, message in problems_of(error, model):
                self.refuse((name, *path), message)
            return None

    def with_files(self, given: Mapping[str, Any]) -> dict[str, Any]:
        """Return the broker's settings with paths from the settings file's folder, of files that can be read."""
        broker = dict(given)
        for key in FILES:
            if key not in broker:
                continue
            if not isinstance(broker[key], str) or "\0" in broker[key]:
                self.refuse(("broker", key), f"must be the path of a file, is {broker[key]!r}")
                del broker[key]
                continue
            path = FilePath(self.source.file).parent / broker[key]
            if not path.is_file():
                self.refuse(("broker", key), f"there is no file {path}")
            elif not os.access(path, os.R_OK):
                self.refuse(("broker", key), f"{path} cannot be read by this user")
            broker[key] = path
        return broker

    def defaults(self) -> dict[str, Any]:
        """Return what holds for every characteristic that does not say otherwise."""
        given = self.source.tree.get("defaults", {})
        if not isinstance(given, dict):
            self.refuse(("defaults",), f"must hold keys and values, is {given!r}")
            return {}
        for key in sorted(OWN & set(given)):
            self.refuse(("defaults", key), "belongs to one characteristic and cannot be a default")
        known = keys_of(Characteristic)
        for key in given:
            if key not in known and key not in OWN:
                self.refuse(("defaults", key), f"is no key of a characteristic{nearest(key, known)}")
        return {key: value for key, value in given.items() if key in known and key not in OWN}

    def entries(self) -> Iterator[tuple[Path, dict[str, Any]]]:
        """Yield every characteristic's entry, families told apart, with its place."""
        given = self.source.tree.get("characteristics")
        if not isinstance(given, list) or not given:
            self.refuse(("characteristics",), "must be a list of at least one characteristic")
            return
        for place, entry in enumerate(given):
            path: Path = ("characteristics", place)
            if not isinstance(entry, dict):
                self.refuse(path, f"must hold keys and values, is {entry!r}")
            elif "family" not in entry:
                if "each" in entry:
                    self.refuse((*path, "each"), "belongs to a family; write family instead of id")
                yield path, {key: value for key, value in entry.items() if key != "each"}
            else:
                try:
                    for member in members(entry):
                        yield path, member
                except FamilyError as error:
                    self.refuse((*path, error.key), str(error))

    def characteristics(self, entries: Sequence[tuple[Path, dict[str, Any]]]) -> list[Characteristic]:
        """Return all characteristics of the entries that can be read."""
        defaults = self.defaults()
        places: dict[str, Path] = {}
        found: list[Characteristic] = []
        for path, entry in entries:
            whole = {**{key: value for key, value in defaults.items() if key not in entry}, **entry}
            try:
                characteristic = Characteristic.model_validate(whole)
            except ValidationError as error:
                for inner, message in problems_of(error, Characteristic):
                    from_defaults = inner and inner[0] in defaults and inner[0] not in entry
                    self.refuse(("defaults", *inner) if from_defaults else (*path, *inner), message)
                if isinstance(entry.get("id"), str):
                    places.setdefault(entry["id"], path)
                continue
            if characteristic.id in places:
                first = self.source.line(places[characteristic.id])
                key = "family" if "family" in self.source.tree["characteristics"][path[1]] else "id"
                self.refuse((*path, key), f"{characteristic.id} stands twice, first in line {first}")
            places.setdefault(characteristic.id, path)
            found.append(characteristic)
        return found

    def within_prefix(self, characteristics: Sequence[Characteristic], publish: Publish) -> None:
        """Refuse topics on which the service itself speaks."""
        own = publish.prefix + "/"
        for characteristic in characteristics:
            if characteristic.topic.startswith(own):
                message = (
                    f"{characteristic.topic} lies under {own}, where quietmill itself publishes; move publish.prefix"
                )
                self.refuse(("characteristics",), f"{characteristic.id}: topic {message}")
                return


def load(path: FilePath, overrides: Sequence[str] = ()) -> Settings:
    """Read and check a settings file; `overrides` such as `press1.force.cusum.h=6` replace single settings.

    Raises `SettingsError` with all that is wrong: file, line, path and remedy.
    """
    source = read_source(path)
    reading = Reading(source)
    for key in source.tree:
        if key not in KEYS:
            reading.refuse((key,), f"is no key of the settings{nearest(key, KEYS)}")
    broker, web, publish = reading.part("broker"), reading.part("web"), reading.part("publish")
    entries = list(reading.entries())
    source.problems += override(entries, overrides)
    characteristics = reading.characteristics(entries)
    reading.within_prefix(characteristics, publish or Publish())
    record = None
    if "record" in source.tree:
        try:
            record = record_of(source.tree["record"])
        except ValueError as error:
            reading.refuse(("record",), str(error))
    if source.problems:
        raise SettingsError(sorted(source.problems, key=lambda problem: problem.line))
    return Settings(
        path=path, broker=broker, record=record, web=web, publish=publish, characteristics=tuple(characteristics)
    )
