"""What a form refused, in plain words."""

from collections.abc import Iterator, Mapping, Sequence
from typing import Final

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from quietmill.settings.characteristic import Baseline, CusumForm, EwmaForm, Payload, Specification
from quietmill.settings.problems import Path, nearest, shown

__all__ = ["keys_of", "problems_of"]

INNER: Final[Mapping[str, type[BaseModel]]] = {
    "payload": Payload,
    "baseline": Baseline,
    "ewma": EwmaForm,
    "cusum": CusumForm,
    "specification": Specification,
}
EXAMPLES: Final[Mapping[str, str]] = {
    "id": "id: press1.force",
    "topic": "topic: tiles/press/1/force",
    "baseline": "baseline: {centre: 240.0, sigma: 2.0}",
    "centre": "baseline: {centre: 240.0, sigma: 2.0}",
    "sigma": "baseline: {centre: 240.0, sigma: 2.0}",
    "lambda": "ewma: {lambda: 0.1, L: 2.814}",
    "L": "ewma: {lambda: 0.1, L: 2.814}",
    "k": "cusum: {k: 0.5, h: 5}",
    "h": "cusum: {k: 0.5, h: 5}",
    "url": "record: {url: sqlite:quietmill.db}",
}


def keys_of(model: type[BaseModel]) -> list[str]:
    """Return the keys of a part of the settings as the file writes them."""
    keys = [info.alias or name for name, info in model.model_fields.items()]
    return [*keys, "lower", "upper"] if model is Baseline else keys


def in_words(error: ErrorDetails, keys: Sequence[str]) -> str:
    """Say a validation error in plain words; `keys` are those known where it arose."""
    limits = error.get("ctx", {})
    value = shown(error["input"])
    match error["type"]:
        case "extra_forbidden":
            return f"is no key here{nearest(str(error['loc'][-1]), keys)}"
        case "missing":
            key = str(error["loc"][-1])
            return f"is missing; write it as in {EXAMPLES[key]}" if key in EXAMPLES else "is missing"
        case "greater_than":
            return f"must be greater than {limits['gt']:g}, is {value}"
        case "greater_than_equal":
            return f"must be at least {limits['ge']:g}, is {value}"
        case "less_than_equal":
            return f"must be at most {limits['le']:g}, is {value}"
        case "finite_number":
            return f"must be a finite number, is {value}"
        case "float_type":
            return f"must be a number, is {value}"
        case "int_type" | "int_from_float":
            return f"must be a whole number, is {value}"
        case "model_type" | "dict_type":
            return f"must hold keys and values, is {value}"
        case "value_error":
            return str(limits["error"])
        case _:
            return f"{error['msg'].lower()}, is {value}"


def problems_of(error: ValidationError, model: type[BaseModel]) -> Iterator[tuple[Path, str]]:
    """Yield where and what, for each thing that a form refused."""
    for detail in error.errors(include_url=False):
        path = detail["loc"]
        if path and path[-1] == "[key]":
            path = path[:-1]
        inner = INNER.get(str(path[0])) if len(path) > 1 else None
        yield path, in_words(detail, keys_of(inner or model))
