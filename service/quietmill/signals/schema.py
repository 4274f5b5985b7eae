"""The JSON Schema of an event, as it ships with the package."""

import json
from importlib.resources import files
from typing import Any

__all__ = ["schema"]


def schema() -> dict[str, Any]:
    """Return the JSON Schema (2020-12) that every event document meets."""
    return json.loads((files("quietmill.signals") / "event.schema.json").read_text(encoding="utf-8"))
