"""Families: one entry that stands for many characteristics."""

import pytest

from settings.conftest import Loaded, Refused

FAMILY = """\
characteristics:
  - family: press{n}.force
    each: {n: [1, 2]}
    topic: tiles/press/{n}/force
    baseline: {centre: 240.0, sigma: 2.0}
"""


def test_a_name_is_filled_in_every_text(loaded: Loaded) -> None:
    keys = '    payload: {value: "/p{n}/force"}\n    reaction: Look at {n}.\n    labels: {"line{n}": "{n}"}\n'
    first, second = loaded(FAMILY + keys).characteristics
    assert (first.id, second.id) == ("press1.force", "press2.force")
    assert (first.topic, second.topic) == ("tiles/press/1/force", "tiles/press/2/force")
    assert second.payload is not None
    assert (second.payload.value, second.reaction, second.labels) == ("/p2/force", "Look at 2.", {"line2": "2"})


def test_several_names_stand_for_every_combination(loaded: Loaded) -> None:
    text = FAMILY.replace("press{n}", "kiln{n}.{zone}").replace("[1, 2]", "[1, 2], zone: [in, out]")
    ids = [characteristic.id for characteristic in loaded(text).characteristics]
    assert ids == ["kiln1.in.force", "kiln1.out.force", "kiln2.in.force", "kiln2.out.force"]


def test_two_braces_are_one(loaded: Loaded) -> None:
    settings = loaded(FAMILY + '    unit: "{{n}} {n} }}{{"\n')
    assert settings.characteristics[1].unit == "{n} 2 }{"


def test_braces_outside_a_family_are_themselves(loaded: Loaded) -> None:
    text = FAMILY.replace("family: press{n}.force", "id: press1.force").replace("    each: {n: [1, 2]}\n", "")
    assert loaded(text).characteristics[0].topic == "tiles/press/{n}/force"


def test_defaults_hold_for_members_as_they_are(loaded: Loaded) -> None:
    settings = loaded('defaults: {unit: "{n}", quiet_points: 3}\n' + FAMILY)
    assert [(one.unit, one.quiet_points) for one in settings.characteristics] == [("{n}", 3), ("{n}", 3)]


NEEDS_EACH = "a family needs each, such as each: {n: [1, 2, 3]}"
NEEDS_LIST = "needs a list of values, such as [1, 2, 3]"
BRACES = "write {{ for the brace itself"
MANY = ", ".join(map(str, range(500)))
FAULTS = [  # what is replaced by what, and the line, place and words of the refusal
    ("    each: {n: [1, 2]}\n", "", 2, ".each", NEEDS_EACH),
    ("{n: [1, 2]}", "{}", 3, ".each", NEEDS_EACH),
    ("{n: [1, 2]}", "[1, 2]", 3, ".each", NEEDS_EACH),
    ("[1, 2]", "3", 3, ".each.n", NEEDS_LIST),
    ("[1, 2]", "[]", 3, ".each.n", NEEDS_LIST),
    ("[1, 2]", "[1, 1.5]", 3, ".each.n", "takes words and whole numbers, has 1.5"),
    ("[1, 2]", "[1, true]", 3, ".each.n", "takes words and whole numbers, has true"),
    ("[1, 2]", "[1, 2, '1']", 3, ".each.n", "has '1' twice"),
    ("[1, 2]", "[1, 2], a-b: [1]", 3, ".each.a-b", "'a-b' is no name; use letters, digits and _"),
    ("[1, 2]", f"[{MANY}], m: [{MANY}]", 3, ".each", "stands for 250,000 characteristics; 200,000 is the most"),
    ("press/{n}", "press/{line}", 4, ".topic", f"each has no name 'line'; each has n; {BRACES}"),
    ("2.0}\n", '2.0}\n    labels: {line: "{m}"}\n', 6, ".labels.line", f"each has no name 'm'; each has n; {BRACES}"),
    ("tiles/press/{n}", "tiles{", 4, ".topic", f"a single brace stands in 'tiles{{/force'; {BRACES}"),
    ("each:", "id: press1.force\n    each:", 3, ".id", "an entry has either id or family"),
    ("press{n}", "press", 2, ".family", "several members are called press.force; use every name of each in it"),
]


@pytest.mark.parametrize(("old", "new", "line", "place", "words"), FAULTS)
def test_a_faulty_family_is_refused_once(
    refused: Refused, old: str, new: str, line: int, place: str, words: str
) -> None:
    assert refused(FAMILY.replace(old, new, 1)) == [f"plant.yaml:{line}: characteristics[0]{place}: {words}"]


def test_the_rest_of_a_faulty_family_is_checked_all_the_same(refused: Refused) -> None:
    text = FAMILY.replace("press/{n}", "press/{line}").replace("sigma: 2.0", "sigma: 0")
    assert [problem.split(": ")[1] for problem in refused(text)] == [
        "characteristics[0].topic",
        "characteristics[0].baseline.sigma",
    ]


def test_what_all_members_share_is_refused_once(refused: Refused) -> None:
    problems = refused(FAMILY.replace("sigma: 2.0", "sigma: -2.0"))
    assert problems == ["plant.yaml:5: characteristics[0].baseline.sigma: must be greater than 0, is -2.0"]


def test_each_without_a_family_is_refused(refused: Refused) -> None:
    problems = refused(FAMILY.replace("family: press{n}.force", "id: press1.force"))
    assert problems == ["plant.yaml:3: characteristics[0].each: belongs to a family; write family instead of id"]


def test_one_id_in_two_families_is_refused(refused: Refused) -> None:
    second = FAMILY.partition("\n")[2].replace("[1, 2]", "[2, 3]")
    message = "plant.yaml:6: characteristics[1].family: its member press2.force stands twice, first in line 2"
    assert refused(FAMILY + second) == [message]


def test_ten_thousand_members_are_all_there(loaded: Loaded) -> None:
    hundred = ", ".join(map(str, range(100)))
    text = FAMILY.replace("{n: [1, 2]}", f"{{n: [{hundred}], m: [{hundred}]}}").replace("press{n}", "press{n}.{m}")
    ids = {characteristic.id for characteristic in loaded(text).characteristics}
    assert len(ids) == 10_000
