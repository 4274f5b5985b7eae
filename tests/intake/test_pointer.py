import pytest

from quietmill.intake.pointer import MISSING, Pointer

RFC_DOCUMENT = {
    "foo": ["bar", "baz"],
    "": 0,
    "a/b": 1,
    "c%d": 2,
    "e^f": 3,
    "g|h": 4,
    "i\\j": 5,
    'k"l': 6,
    " ": 7,
    "m~n": 8,
}


@pytest.mark.parametrize(
    ("text", "found"),
    [
        ("", RFC_DOCUMENT),
        ("/foo", ["bar", "baz"]),
        ("/foo/0", "bar"),
        ("/", 0),
        ("/a~1b", 1),
        ("/c%d", 2),
        ("/e^f", 3),
        ("/g|h", 4),
        ("/i\\j", 5),
        ('/k"l', 6),
        ("/ ", 7),
        ("/m~0n", 8),
    ],
)
def test_the_examples_of_rfc_6901_section_5_hold(text: str, found: object) -> None:
    assert Pointer(text).find(RFC_DOCUMENT) == found


@pytest.mark.parametrize(
    "text", ["/bar", "/foo/2", "/foo/-", "/foo/00", "/foo/-1", "/foo/+1", "/foo/\u0663", "/foo/bar", "/foo/0/0", "//x"]
)
def test_what_is_not_there_is_missing(text: str) -> None:
    assert Pointer(text).find(RFC_DOCUMENT) is MISSING


def test_null_is_there() -> None:
    assert Pointer("/force").find({"force": None}) is None


def test_tilde_one_after_tilde_zero_is_not_read_twice() -> None:
    assert Pointer("/~01").find({"~1": 5, "/": 6}) == 5


def test_an_index_of_many_digits_is_missing() -> None:
    assert Pointer("/" + "9" * 5000).find([1]) is MISSING


@pytest.mark.parametrize("text", ["force", "#/force", " /force"])
def test_a_pointer_that_does_not_begin_with_a_slash_is_refused(text: str) -> None:
    with pytest.raises(ValueError, match="must be empty or begin with /"):
        Pointer(text)


@pytest.mark.parametrize("text", ["/a~", "/a~2b", "/~~0"])
def test_a_tilde_that_escapes_nothing_is_refused(text: str) -> None:
    with pytest.raises(ValueError, match="~ must be written ~0"):
        Pointer(text)
