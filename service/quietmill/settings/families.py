"""Families: one entry that stands for many characteristics."""

import re
from collections.abc import Iterator, Mapping
from itertools import product
from math import prod
from typing import Any, Final

from quietmill.settings.problems import Path, shown

__all__ = ["faults", "members", "stand_in"]

BRACES: Final = re.compile(r"\{\{|\}\}|\{([^{}]*)\}|[{}]")
NAME: Final = re.compile(r"[A-Za-z_][A-Za-z0-9_]*")
MAX_MEMBERS: Final = 200_000


def filled(value: Any, names: Mapping[str, str]) -> Any:
    """Return a value in which every {name} of every text is filled in; `{{` and `}}` are braces.

    A name that is not known stands for itself, and a lone brace for nothing.
    """
    if isinstance(value, str):
        if "{" not in value and "}" not in value:
            return value

        def fill(match: re.Match[str]) -> str:
            found, name = match.group(), match.group(1)
            if found in {"{{", "}}"}:
                return found[0]
            return "" if name is None else names.get(name, name)

        return BRACES.sub(fill, value)
    if isinstance(value, list):
        return [filled(item, names) for item in value]
    if isinstance(value, dict):
        return {filled(name, names): filled(item, names) for name, item in value.items()}
    return value


def faults_of_texts(value: Any, names: Mapping[str, Any], path: Path) -> Iterator[tuple[Path, str]]:
    """Yield where a text has a brace too many, or a name that the family does not know."""
    if isinstance(value, str):
        for match in BRACES.finditer(value):
            found, name = match.group(), match.group(1)
            if found in {"{", "}"}:
                yield path, f"a single brace stands in {shown(value)}; write {found * 2} for the brace itself"
            elif name is not None and name not in names:
                known = f"; each has {', '.join(names)}" if names else ""
                yield path, f"each has no name {shown(name)}{known}; write {{{{ for the brace itself"
    elif isinstance(value, list):
        for place, item in enumerate(value):
            yield from faults_of_texts(item, names, (*path, place))
    elif isinstance(value, dict):
        for key, item in value.items():
            yield from faults_of_texts(key, names, (*path, key))
            yield from faults_of_texts(item, names, (*path, key))


def fault_of_values(name: str, values: Any) -> str | None:
    """Return what is wrong with the values of one name in `each`."""
    if not NAME.fullmatch(name):
        return f"{shown(name)} is no name; use letters, digits and _"
    if not isinstance(values, list) or not values:
        return "needs a list of values, such as [1, 2, 3]"
    seen: set[str] = set()
    for value in values:
        if isinstance(value, bool) or not isinstance(value, (str, int)):
            return f"takes words and whole numbers, has {shown(value)}"
        if str(value) in seen:
            return f"has {shown(value)} twice"
        seen.add(str(value))
    return None


def faults(entry: Mapping[str, Any]) -> Iterator[tuple[Path, str]]:
    """Yield where and why a family's entry cannot be told apart into characteristics.

    >>> list(faults({"family": "press{n}", "each": {"n": [1]}, "unit": "{m}"}))
    [(('unit',), "each has no name 'm'; each has n; write {{ for the brace itself")]
    """
    if "id" in entry:
        yield ("id",), "an entry has either id or family"
    each = entry.get("each")
    if not isinstance(each, dict) or not each:
        yield ("each",), "a family needs each, such as each: {n: [1, 2, 3]}"
        return
    found = [(name, fault_of_values(name, values)) for name, values in each.items()]
    yield from ((("each", name), fault) for name, fault in found if fault)
    if not any(fault for _, fault in found):
        count = prod(len(values) for values in each.values())
        if count > MAX_MEMBERS:
            yield ("each",), f"stands for {count:,} characteristics; {MAX_MEMBERS:,} is the most"
    for key, value in entry.items():
        if key != "each":
            yield from faults_of_texts(value, each, (key,))


def member(entry: Mapping[str, Any], names: Mapping[str, str]) -> dict[str, Any]:
    """Return the entry of one characteristic of a family."""
    rest = {key: filled(value, names) for key, value in entry.items() if key not in {"id", "family", "each"}}
    return {"id": filled(entry["family"], names), **rest}


def members(entry: Mapping[str, Any]) -> Iterator[dict[str, Any]]:
    """Yield the entries of a faultless family's characteristics: every combination of the values in `each`.

    >>> [member["id"] for member in members({"family": "press{n}.force", "each": {"n": [1, 2]}})]
    ['press1.force', 'press2.force']
    """
    each = entry["each"]
    for values in product(*([str(value) for value in values] for values in each.values())):
        yield member(entry, dict(zip(each, values, strict=True)))


def stand_in(entry: Mapping[str, Any]) -> dict[str, Any]:
    """Return one entry like those of a faulty family, so that the rest of it can be checked all the same."""
    return member(entry, {})
