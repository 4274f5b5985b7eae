"""Settings files of a small tile works, written where a test can load them."""

from collections.abc import Callable, Sequence
from pathlib import Path

import pytest

from quietmill.settings import Settings, SettingsError, load

ENTRY = """\
  - id: press1.force
    topic: tiles/press/1/force
    baseline: {centre: 240.0, sigma: 2.0}
"""


def plant(*keys: str, head: str = "") -> str:
    """A settings file whose one characteristic, in lines 2 to 4 behind the head, has further keys."""
    return f"{head}characteristics:\n{ENTRY}" + "".join(f"    {key}\n" for key in keys)


Loaded = Callable[..., Settings]
Refused = Callable[..., list[str]]


def loader(folder: Path) -> Loaded:
    """What loads a text as the settings file of a folder."""

    def load_text(text: str, overrides: Sequence[str] = ()) -> Settings:
        path = folder / "plant.yaml"
        path.write_bytes(text.encode("utf-8", "surrogatepass"))
        return load(path, overrides)

    return load_text


@pytest.fixture
def loaded(tmp_path: Path) -> Loaded:
    """Load a text as a settings file."""
    return loader(tmp_path)


@pytest.fixture(scope="session")
def loaded_once(tmp_path_factory: pytest.TempPathFactory) -> Loaded:
    """Load many texts, one after the other, in one folder."""
    return loader(tmp_path_factory.mktemp("settings"))


@pytest.fixture
def refused(loaded: Loaded, tmp_path: Path) -> Refused:
    """Load a text that must be refused, and return what is wrong with it, without the folder."""

    def refusal(text: str, overrides: Sequence[str] = ()) -> list[str]:
        with pytest.raises(SettingsError) as caught:
            loaded(text, overrides)
        return [str(problem).removeprefix(f"{tmp_path}/") for problem in caught.value.problems]

    return refusal
