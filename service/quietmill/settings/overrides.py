"""Settings tried from the command line, such as `press1.force.cusum.h=6`."""

from collections.abc import Collection, Sequence
from typing import Any, Final

from quietmill.settings.characteristic import with_default_detector
from quietmill.settings.entries import Entry
from quietmill.settings.problems import Problem, SettingsError, nearest
from quietmill.settings.source import Source
from quietmill.settings.tree import read_tree

__all__ = ["OPTION", "override"]

OPTION: Final = "--set"


def owner_of(place: str, ids: Collection[str]) -> str | None:
    """Return the longest id that, followed by a dot, begins a place.

    >>> owner_of("press1.force.cusum.h", {"press1", "press1.force"})
    'press1.force'
    """
    steps = place.split(".")
    heads = (".".join(steps[:count]) for count in range(len(steps) - 1, 0, -1))
    return next((head for head in heads if head in ids), None)


def put(keys: dict[str, Any], steps: Sequence[str], value: Any) -> None:
    """Set a value in an entry's keys, leaving what they share with others untouched."""
    for step in steps[:-1]:
        inner = keys.get(step)
        keys[step] = dict(inner) if isinstance(inner, dict) else {}
        keys = keys[step]
    keys[steps[-1]] = value


def override(entries: Sequence[Entry], texts: Sequence[str]) -> list[Problem]:
    """Replace single settings in the entries of characteristics; return what was wrong with the texts.

    A value within the CUSUM of a characteristic that names no detector changes the default one.
    """
    by_id = {entry.keys["id"]: entry for entry in entries if isinstance(entry.keys.get("id"), str)}
    problems: list[Problem] = []
    for text in texts:
        place, equals, value = text.partition("=")
        owner = owner_of(place, by_id)
        source = Source(f"{OPTION} {text}")
        if not equals or not all(place.split(".")) or (owner is None and (place in by_id or "." not in place)):
            source.report((), "write ID.KEY=VALUE, such as press1.force.cusum.h=6")
        elif owner is None:
            source.report((), f"no characteristic is called so{nearest(place, by_id)}")
        elif place == f"{owner}.id":
            source.report((), "the id itself cannot be set")
        else:
            apply(by_id[owner], place[len(owner) + 1 :].split("."), value, source)
        problems += source.problems
    return problems


def apply(entry: Entry, steps: Sequence[str], value: str, source: Source) -> None:
    """Put the value that a text stands for into an entry, or report what is wrong with it."""
    try:
        tree = read_tree(value, source)
    except SettingsError as error:
        source.problems += [Problem(source.file, 0, (), problem.message) for problem in error.problems]
        return
    if steps[0] == "cusum" and len(steps) > 1:
        entry.keys = with_default_detector(entry.keys)
    put(entry.keys, steps, tree)
    entry.set_by[tuple(steps)] = source.file.removeprefix(f"{OPTION} ")
