"""The characteristics of a file before they are checked: families told apart, defaults beneath, overrides on top."""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from typing import Any, Final

from quietmill.settings.characteristic import Characteristic
from quietmill.settings.families import faults, members, stand_in
from quietmill.settings.problems import Path, nearest, shown
from quietmill.settings.source import Source
from quietmill.settings.wording import keys_of

__all__ = ["Entry", "defaults_of", "entries_of"]

OWN: Final = frozenset({"id", "topic", "family", "each"})
"""What no two characteristics share, and defaults therefore cannot give."""

FILLED_UP: Final = frozenset({"payload", "ewma", "cusum", "specification", "labels"})
"""Keys whose members are filled up from defaults one by one; a baseline, whose forms exclude each other, is not."""


@dataclass(slots=True)
class Entry:
    """One characteristic to be: all its `keys`, and which of them are its own.

    `path` is where in the file it stands, a family's members all at one place; `set_by` says which override (its
    whole text) gave what stands at a path within the entry.
    """

    path: Path
    own: Mapping[str, Any]
    keys: dict[str, Any]
    set_by: dict[Path, str] = field(default_factory=dict[Path, str])

    def overriding(self, path: Path) -> str | None:
        """Return the override that a problem at a path within the entry comes from, if it does."""
        for place, text in self.set_by.items():
            met = place[: len(path)] == path[: len(place)] if path else place[0] in {"rules", "ewma", "cusum"}
            if met or (path and place[0] == path[0] and path[0] not in self.own):
                return text
        return None

    def place(self, path: Path, defaults: Mapping[str, Any]) -> Path:
        """Return where in the file a path within the entry was written: there, or among the defaults."""
        if not path or path[0] not in defaults:
            return (*self.path, *path)
        own, beneath = self.own.get(str(path[0]), ...), defaults[str(path[0])]
        inherited = own is ... or (
            len(path) > 1
            and path[0] in FILLED_UP
            and isinstance(own, dict)
            and isinstance(beneath, dict)
            and path[1] in beneath
            and path[1] not in own
        )
        return ("defaults", *path) if inherited else (*self.path, *path)


def merged(defaults: Mapping[str, Any], own: Mapping[str, Any]) -> dict[str, Any]:
    """Return an entry's keys with the defaults beneath; a key that says null takes none.

    >>> merged({"payload": {"time": "/at"}, "gap": "1h"}, {"payload": {"value": "/force"}, "gap": None})
    {'payload': {'time': '/at', 'value': '/force'}, 'gap': None}
    """
    keys = {**defaults, **own}
    for key in FILLED_UP & defaults.keys() & own.keys():
        if isinstance(defaults[key], dict) and isinstance(own[key], dict):
            keys[key] = {**defaults[key], **own[key]}
    return keys


def defaults_of(source: Source) -> dict[str, Any]:
    """Return what holds for every characteristic that does not say otherwise."""
    given = source.tree.get("defaults", {})
    if not isinstance(given, dict):
        source.report(("defaults",), f"must hold keys and values, is {shown(given)}")
        return {}
    known = [key for key in keys_of(Characteristic) if key not in OWN]
    for key in given:
        if key in OWN:
            source.report(("defaults", key), "belongs to one characteristic and cannot be a default")
        elif key not in known:
            source.report(("defaults", key), f"is no key of a characteristic{nearest(key, known)}")
    return {key: value for key, value in given.items() if key in known}


def entries_of(source: Source, defaults: Mapping[str, Any]) -> Iterator[Entry]:
    """Yield every characteristic's entry in the order of the file."""
    given = source.tree.get("characteristics")
    if not isinstance(given, list) or not given:
        source.report(("characteristics",), f"must be a list of at least one characteristic, is {shown(given or None)}")
        return
    for place, entry in enumerate(given):
        path: Path = ("characteristics", place)
        if not isinstance(entry, dict):
            source.report(path, f"must hold keys and values, is {shown(entry)}")
        elif "family" not in entry:
            if "each" in entry:
                source.report((*path, "each"), "belongs to a family; write family instead of id")
            own = {key: value for key, value in entry.items() if key != "each"}
            yield Entry(path, own, merged(defaults, own))
        else:
            found = list(faults(entry))
            for inner, message in found:
                source.report((*path, *inner), message)
            for own in [stand_in(entry)] if found else members(entry):
                yield Entry(path, own, merged(defaults, own))
