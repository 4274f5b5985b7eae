"""Families: one entry that stands for many characteristics."""

import re
from collections.abc import Iterator, Mapping
from itertools import product
from typing import Any, Final

from quietmill.settings.problems import shown

__all__ = ["FamilyError", "members"]

BRACES: Final = re.compile(r"\{\{|\}\}|\{([^{}]*)\}|[{}]")
NAME: Final = re.compile(r"[A-Za-z_][A-Za-z0-9_]*")
MAX_MEMBERS: Final = 200_000


class FamilyError(ValueError):
    """A family that cannot be told apart into characteristics; `key` is where in its entry."""

    def __init__(self, key: str, message: str) -> None:
        super().__init__(message)
        self.key = key


def filled(value: Any, names: Mapping[str, str], key: str) -> Any:
    """Return a value in which every {name} of every text is filled in; `{{` and `}}` are braces."""
    if isinstance(value, str):
        if "{" not in value and "}" not in value:
            return value

        def fill(match: re.Match[str]) -> str:
            found = match.group()
            if found in {"{{", "}}"}:
                return found[0]
            if found in {"{", "}"}:
                raise FamilyError(
                    key, f"a single brace stands in {shown(value)}; write {found * 2} for the brace itself"
                )
            name = match.group(1)
            if name not in names:
                raise FamilyError(key, f"{found} is not in each; it names {', '.join(names)}")
            return names[name]

        return BRACES.sub(fill, value)
    if isinstance(value, list):
        return [filled(item, names, key) for item in value]
    if isinstance(value, dict):
        return {filled(name, names, key): filled(item, names, key) for name, item in value.items()}
    return value


def texts_of(name: str, values: Any) -> list[str]:
    """Return the texts that one name of `each` stands for."""
    if not NAME.fullmatch(name):
        raise FamilyError("each", f"{shown(name)} is no name; use letters, digits and _")
    if not isinstance(values, list) or not values:
        raise FamilyError("each", f"{name} needs a list of values, such as [1, 2, 3]")
    for value in values:
        if isinstance(value, bool) or not isinstance(value, (str, int)):
            raise FamilyError("each", f"{name} takes words and whole numbers, has {shown(value)}")
    texts = [str(value) for value in values]
    seen: set[str] = set()
    for text in texts:
        if text in seen:
            raise FamilyError("each", f"{name} has {shown(text)} twice")
        seen.add(text)
    return texts


def members(entry: Mapping[str, Any]) -> Iterator[dict[str, Any]]:
    """Yield the entries of a family's characteristics: every combination of the values in `each`.

    Raises `FamilyError`.

    >>> [member["id"] for member in members({"family": "press{n}.force", "each": {"n": [1, 2]}})]
    ['press1.force', 'press2.force']
    """
    if "id" in entry:
        raise FamilyError("id", "an entry has either id or family")
    each = entry.get("each")
    if not isinstance(each, dict) or not each:
        raise FamilyError("each", "a family needs each, such as each: {n: [1, 2, 3]}")
    choices = [texts_of(name, values) for name, values in each.items()]
    count = 1
    for texts in choices:
        count *= len(texts)
    if count > MAX_MEMBERS:
        raise FamilyError("each", f"stands for {count:,} characteristics; {MAX_MEMBERS:,} is the most")
    for values in product(*choices):
        names = dict(zip(each, values, strict=True))
        member = {key: filled(value, names, key) for key, value in entry.items() if key not in {"family", "each"}}
        yield {"id": filled(entry["family"], names, "family"), **member}
