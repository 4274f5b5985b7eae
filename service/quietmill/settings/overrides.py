"""Settings tried from the command line, such as `press1.force.cusum.h=6`."""

from collections.abc import Sequence
from typing import Any, Final

from ruamel.yaml import YAML
from ruamel.yaml.error import YAMLError

from quietmill.settings.problems import Path, Problem, SettingsError, nearest
from quietmill.settings.source import Source, Tree

__all__ = ["override"]

OPTION: Final = "--set"


def value_of(text: str) -> Any:
    """Return what the text of a value stands for in YAML. Raises `ValueError`."""
    try:
        node = YAML(typ="safe", pure=True).compose(text)
        return Tree(Source(OPTION)).build(node, ()) if node is not None else None
    except (YAMLError, SettingsError, RecursionError) as error:
        raise ValueError(f"{text!r} is no YAML value: {str(error).splitlines()[0]}") from None


def owner_of(place: str, ids: set[str]) -> str | None:
    """Return the longest id that, followed by a dot, begins a place."""
    steps = place.split(".")
    heads = (".".join(steps[:count]) for count in range(len(steps) - 1, 0, -1))
    return next((head for head in heads if head in ids), None)


def put(entry: dict[str, Any], keys: Sequence[str], value: Any) -> None:
    """Set a value in an entry, leaving what the entry shares with others untouched."""
    for key in keys[:-1]:
        inner = entry.get(key)
        entry[key] = dict(inner) if isinstance(inner, dict) else {}
        entry = entry[key]
    entry[keys[-1]] = value


def override(entries: Sequence[tuple[Path, dict[str, Any]]], texts: Sequence[str]) -> list[Problem]:
    """Replace single settings in the entries of characteristics; return what was wrong with the texts."""
    by_id = {entry["id"]: entry for _, entry in entries if isinstance(entry.get("id"), str)}
    problems: list[Problem] = []
    for text in texts:
        place, equals, value = text.partition("=")
        owner = owner_of(place, set(by_id))
        if not equals or "." not in place:
            problems.append(Problem(OPTION, 0, (), f"{text}: write ID.KEY=VALUE, such as press1.force.cusum.h=6"))
        elif owner is None:
            problems.append(Problem(OPTION, 0, (), f"{text}: no characteristic is called so{nearest(place, by_id)}"))
        else:
            try:
                put(by_id[owner], place[len(owner) + 1 :].split("."), value_of(value))
            except ValueError as error:
                problems.append(Problem(OPTION, 0, (), f"{place}: {error}"))
    return problems
