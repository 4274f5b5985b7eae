"""From bytes to a plain tree: whatever the file is, one clear message says what is wrong with it and where."""

from itertools import pairwise
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import settings as trying
from hypothesis import strategies as st

from quietmill.settings import SettingsError, load
from quietmill.settings.source import MAX_FILE_BYTES, Source
from quietmill.settings.tree import MAX_ALIASED, read_tree, scalar
from settings.conftest import Loaded, Refused, plant

TAGS = "tags (words that begin with '!') are refused; write the plain value"
UNREADABLE = {
    "empty": (b"", ": is empty; config/minimal.yaml shows the least that is needed"),
    "blank": (b" \n\n", ": is empty; config/minimal.yaml shows the least that is needed"),
    "comments": (b"# nothing yet\n", ": must hold keys such as broker and characteristics, is nothing"),
    "list": (b"- id: a\n", ":1: must hold keys such as broker and characteristics, is a list"),
    "text": (b"hello\n", ":1: must hold keys such as broker and characteristics, is 'hello'"),
    "binary": (bytes(range(256)), ":2: is not UTF-8 text; save the file as UTF-8"),
    "latin": ("a: 1\nunit: °C\n".encode("latin-1"), ":2: is not UTF-8 text; save the file as UTF-8"),
    "utf16": ("a: 1\n".encode("utf-16"), ":1: is not UTF-8 text; save the file as UTF-8"),
    "nul": (b"a: 1\nb: \0\n", ":2: holds a character that no YAML text has; is it a binary file?"),
    "control": (b"a: \x01\n", ":1: holds a character that no YAML text has; is it a binary file?"),
    "tab": (b"broker:\n\turl: x\n", ":2: is not YAML: a tab stands where only spaces may; indent with spaces"),
    "colon": (
        b"broker:\n  url: a: b\n",
        ":2: is not YAML: a second ': ' stands in one line; put the text in quotes, or check the indentation above",
    ),
    "at": (b"unit: @x\n", ":1: is not YAML: found character '@' that cannot start any token; put the text in quotes"),
    "tag": (b"broker:\n  url: !!str x\n", f":2: broker.url: {TAGS}"),
    "tag on a key": (b"!!str broker: x\n", f":1: {TAGS}"),
    "merge": (b"broker:\n  <<: {url: x}\n", ":2: broker: merge keys (<<) are YAML 1.1; use defaults or a family"),
    "two documents": (b"a: 1\n---\nb: 2\n", ":2: a second YAML document (---) begins here; settings are one"),
    "key": (
        b"? [a]\n: b\n",
        ":1: a key must be a word, is a list or a mapping; quote a text that begins with a brace or bracket",
    ),
    "no anchor": (b"a: *b\n", ":1: a: there is no anchor &b before this alias"),
    "within itself": (b"a: &a [*a]\n", ":1: a[0]: an alias stands within what it stands for"),
    "deep lists": (b"a: " + b"[" * 10_000, ":1: a[0][0]: is nested more than 50 levels deep; settings never are"),
    "deep keys": (b"a: " + b"{a: " * 100, ":1: a.a.a: is nested more than 50 levels deep; settings never are"),
}  # fmt: skip


@pytest.mark.parametrize(("content", "message"), UNREADABLE.values(), ids=UNREADABLE)
def test_a_file_that_is_no_yaml_mapping_gets_one_message(content: bytes, message: str, tmp_path: Path) -> None:
    path = tmp_path / "plant.yaml"
    path.write_bytes(content)
    with pytest.raises(SettingsError) as caught:
        load(path)
    assert [str(problem) for problem in caught.value.problems] == [f"{path}{message}"]


def test_a_missing_file_is_named(tmp_path: Path) -> None:
    with pytest.raises(SettingsError, match=r"none\.yaml: there is no such file$"):
        load(tmp_path / "none.yaml")


def test_a_folder_is_told_from_a_file(tmp_path: Path) -> None:
    with pytest.raises(SettingsError, match=r": is a folder; name the YAML file in it$"):
        load(tmp_path)


def test_a_path_that_cannot_be_one_is_refused() -> None:
    with pytest.raises(SettingsError, match="cannot be read: embedded null byte"):
        load(Path("plant\0.yaml"))


def test_a_file_that_the_system_withholds_is_refused_in_its_words(tmp_path: Path) -> None:
    (tmp_path / "plant.yaml").touch()
    with pytest.raises(SettingsError, match=r"inside\.yaml: cannot be read: Not a directory$"):
        load(tmp_path / "plant.yaml" / "inside.yaml")


def test_a_huge_file_is_not_even_read(tmp_path: Path) -> None:
    path = tmp_path / "plant.yaml"
    with path.open("wb") as file:
        file.truncate(MAX_FILE_BYTES + 1)
    with pytest.raises(SettingsError, match="is larger than 64 MiB; settings never are"):
        load(path)


def test_an_alias_bomb_is_refused_before_it_expands(refused: Refused) -> None:
    levels = [f"{name}: &{name} [{', '.join(['*' + before] * 10)}]" for before, name in pairwise("abcdefghi")]
    problems = refused("\n".join(["a: &a [x, x, x, x, x, x, x, x, x, x]", *levels]))
    assert problems == [
        "plant.yaml:4: d[7]: aliases stand for more than 10,000 values; write them out, or use a family"
    ]


def test_aliases_work_within_their_bound(loaded: Loaded) -> None:
    text = plant("specification: &s {lower: 230, upper: 250}") + plant("specification: *s").partition("\n")[2]
    settings = loaded(text.replace("press1", "press2", 1))
    assert settings.characteristics[1].specification == settings.characteristics[0].specification


def test_aliases_may_stand_for_as_many_values_as_the_bound_says() -> None:
    values = MAX_ALIASED // 10 - 1
    tree = read_tree(f"a: &a [{', '.join('x' * values)}]\nb: [{', '.join(['*a'] * 10)}]", Source("plant.yaml"))
    assert sum(map(len, tree["b"])) == 10 * values


def test_what_is_wrong_with_an_aliased_value_is_said_where_it_was_written(refused: Refused) -> None:
    text = plant("specification:", "  lower: 250", "  upper: &top {a: 1}", "labels: *top")
    assert "plant.yaml:7: characteristics[0].labels.a: must be text, is 1; put it in quotes" in refused(text)


def test_a_key_that_stands_twice_is_refused_with_both_lines(refused: Refused) -> None:
    problems = refused(plant("unit: kN", "unit: N"))
    assert problems == ["plant.yaml:6: characteristics[0].unit: stands twice, first in line 5; keep one"]


def test_a_byte_order_mark_and_windows_line_ends_are_nothing_to_speak_of(loaded: Loaded) -> None:
    settings = loaded("\ufeff" + plant("unit: kN").replace("\n", "\r\n"))
    assert settings.characteristics[0].unit == "kN"


SCALARS = [
    ("no", "no"), ("on", "on"), ("yes", "yes"), ("true", True), ("False", False), ("~", None), ("", None),
    ("1e-3", 0.001), ("1.5", 1.5), (".5", 0.5), ("-2.", -2.0), ("1_000", "1_000"), ("0x1F", 31), ("0o17", 15),
    ("017", 17), ("1:30", "1:30"), ("2026-03-02", "2026-03-02"), ("-.inf", float("-inf")), ("5.0.1", "5.0.1"),
    ("9" * 5_000, float("inf")),
]  # fmt: skip


@pytest.mark.parametrize(("text", "value"), SCALARS)
def test_plain_words_mean_what_yaml_1_2_says(text: str, value: object) -> None:
    assert scalar(text) == value
    assert type(scalar(text)) is type(value)


def test_what_stands_in_quotes_is_text() -> None:
    assert read_tree('{a: "1", b: \'~\', c: "true"}', Source("plant.yaml")) == {"a": "1", "b": "~", "c": "true"}


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("settings")


@trying(deadline=None)
@given(content=st.binary(max_size=200))
def test_arbitrary_bytes_raise_nothing_but_a_settings_error(folder: Path, content: bytes) -> None:
    path = folder / "plant.yaml"
    path.write_bytes(content)
    with pytest.raises(SettingsError):
        load(path)


@trying(deadline=None)
@given(st.text(st.sampled_from("ab:-[]{},&*!|>'\"%@#?~ \n\t0.1e\\ud"), max_size=60))
def test_arbitrary_yaml_raises_nothing_but_a_settings_error(text: str) -> None:
    source = Source("plant.yaml")
    try:
        read_tree(text, source)
    except SettingsError as error:
        source.problems += error.problems
    assert all("\n" not in str(problem) for problem in source.problems)
