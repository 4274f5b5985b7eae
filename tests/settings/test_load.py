"""A whole file: defaults beneath, overrides on top, every error at once and where it comes from."""

import pytest
from hypothesis import given
from hypothesis import settings as trying
from hypothesis import strategies as st

from quietmill.model import Cusum, Rule
from quietmill.settings import Characteristic, Problem, SettingsError
from quietmill.settings.problems import nearest, path_text
from quietmill.settings.wording import keys_of
from settings.conftest import ENTRY, Loaded, Refused, plant


def test_defaults_hold_where_a_characteristic_says_nothing(loaded: Loaded) -> None:
    head = "defaults: {unit: kN, quiet_points: 3, cusum: {k: 0.5, h: 6}, baseline: {centre: 1, sigma: 1}}\n"
    (one,) = loaded(plant("quiet_points: 5", head=head)).characteristics
    assert (one.unit, one.quiet_points, one.detector.cusum) == ("kN", 5, Cusum(0.5, 6))
    assert one.baseline.centre == 240.0


def test_defaults_fill_up_what_has_members(loaded: Loaded) -> None:
    head = "defaults: {payload: {time: /at, scale: 2}, labels: {area: pressing, line: '9'}}\n"
    (one,) = loaded(plant("payload: {value: /force, scale: 3}", "labels: {line: '1'}", head=head)).characteristics
    assert one.payload is not None
    assert (one.payload.value, one.payload.time, one.payload.scale) == ("/force", "/at", 3)
    assert one.labels == {"area": "pressing", "line": "1"}


def test_a_baseline_is_never_mixed_with_that_of_the_defaults(loaded: Loaded) -> None:
    (one,) = loaded(plant(head="defaults: {baseline: {lower: 0, upper: 6}}\n")).characteristics
    assert (one.baseline.centre, one.baseline.sigma) == (240.0, 2.0)


def test_a_key_that_says_nothing_takes_no_default(loaded: Loaded) -> None:
    head = "defaults: {payload: {value: /v}, cusum: {k: 0.5, h: 6}, gap: 1h}\n"
    (one,) = loaded(plant("payload: null", "cusum: null", "gap: ~", head=head)).characteristics
    assert (one.payload, one.gap) == (None, None)
    assert one.detector.rules == {Rule.BEYOND_LIMITS: 4}


DEFAULTS = [
    ("{quiet_point: 3}", "quiet_point", "is no key of a characteristic; did you mean 'quiet_points'?"),
    ("{id: a}", "id", "belongs to one characteristic and cannot be a default"),
    ("{topic: a}", "topic", "belongs to one characteristic and cannot be a default"),
    ("{quiet_points: 0}", "quiet_points", "must be at least 1, is 0"),
    ("{cusum: {k: 1, h: -1}}", "cusum.h", "must be greater than 0, is -1"),
]


@pytest.mark.parametrize(("text", "place", "words"), DEFAULTS)
def test_what_is_wrong_with_a_default_is_said_once_and_there(
    refused: Refused, text: str, place: str, words: str
) -> None:
    other = ENTRY.replace("press1", "press2")
    problems = refused(plant(head=f"defaults: {text}\n") + other)
    assert problems == [f"plant.yaml:1: defaults.{place}: {words}"]


def test_what_is_wrong_beside_a_default_is_said_where_it_stands(refused: Refused) -> None:
    problems = refused(plant("cusum: {h: -1}", head="defaults: {cusum: {k: -2, h: 5}}\n"))
    assert problems == [
        "plant.yaml:1: defaults.cusum.k: must be at least 0, is -2",
        "plant.yaml:6: characteristics[0].cusum.h: must be greater than 0, is -1",
    ]


def test_defaults_that_are_no_mapping_are_refused(refused: Refused) -> None:
    assert refused(plant(head="defaults: [8]\n")) == ["plant.yaml:1: defaults: must hold keys and values, is a list"]


def test_all_errors_come_at_once_in_the_order_of_the_file(refused: Refused) -> None:
    text = (
        "brokr: {}\nbroker: {version: 4}\n"
        + plant("unit: 5", "basline: 1")
        + ENTRY.replace("sigma: 2.0", "sigma: -2.0").replace("topic", "topik")
        + "  - press3\n"
    )
    assert [problem.partition(": ")[0] + " " + problem.split(": ")[1] for problem in refused(text)] == [
        "plant.yaml:1 brokr",
        "plant.yaml:2 broker.version",
        "plant.yaml:7 characteristics[0].unit",
        "plant.yaml:8 characteristics[0].basline",
        "plant.yaml:9 characteristics[1].id",
        "plant.yaml:9 characteristics[1].topic",
        "plant.yaml:10 characteristics[1].topik",
        "plant.yaml:11 characteristics[1].baseline.sigma",
        "plant.yaml:12 characteristics[2]",
    ]


def test_two_characteristics_of_one_id_are_refused_with_both_lines(refused: Refused) -> None:
    assert refused(plant() + ENTRY) == [
        "plant.yaml:5: characteristics[1].id: press1.force stands twice, first in line 2"
    ]


def test_an_id_stands_twice_even_if_the_other_is_faulty(refused: Refused) -> None:
    problems = refused(plant("unit: 5") + ENTRY)
    assert problems[-1] == "plant.yaml:6: characteristics[1].id: press1.force stands twice, first in line 2"


@pytest.mark.parametrize(
    ("word", "key"), [("basline", "baseline"), ("cumsum", "cusum"), ("Topic", "topic"), ("qiet_points", "quiet_points")]
)
def test_a_misspelt_key_gets_the_nearest_known(refused: Refused, word: str, key: str) -> None:
    assert refused(plant(f"{word}: 1")) == [
        f"plant.yaml:5: characteristics[0].{word}: is no key here; did you mean '{key}'?"
    ]


def test_a_word_like_no_other_gets_the_known_ones_but_never_thousands() -> None:
    assert nearest("zzz", ["k", "h"]) == "; known are k, h"
    assert nearest("zzz", [f"press{n}" for n in range(1000)]).endswith("press11 and 988 more")


def test_a_key_that_is_no_word_is_shown_on_one_line(refused: Refused) -> None:
    (problem,) = refused(plant('"a\\nb\\u001b[31m": 1'))
    assert problem.startswith("plant.yaml:5: characteristics[0]['a\\nb\\x1b[31m']: is no key here")
    assert path_text(("labels", "x" * 500)).endswith("x…]")


OVERRIDES = [
    ("press1.force.cusum.h=6", Cusum(0.5, 6, 0, 2)),
    ("press1.force.cusum.head_start=4", Cusum(0.5, 8, 4, 2)),
    ("press1.force.cusum={k: 1, h: 4}", Cusum(1, 4)),
    ("press1.force.rules=[trend]", None),
    ("press1.force.rules=", Cusum(0.5, 8, 0, 2)),
]


@pytest.mark.parametrize(("text", "cusum"), OVERRIDES)
def test_an_override_replaces_one_setting(loaded: Loaded, text: str, cusum: Cusum | None) -> None:
    assert loaded(plant(), [text]).characteristics[0].detector.cusum == cusum


def test_the_default_detector_keeps_its_limits_when_its_cusum_is_overridden(loaded: Loaded) -> None:
    assert loaded(plant(), ["press1.force.cusum.h=6"]).characteristics[0].detector.rules == {Rule.BEYOND_LIMITS: 4}


def test_overrides_reach_into_defaults_for_one_characteristic_only(loaded: Loaded) -> None:
    text = plant(head="defaults: {cusum: {k: 0.5, h: 5}}\n") + ENTRY.replace("press1", "press2")
    first, second = loaded(text, ["press1.force.cusum.h=6", "press1.force.unit=kN"]).characteristics
    assert (first.detector.cusum, second.detector.cusum) == (Cusum(0.5, 6), Cusum(0.5, 5))
    assert (first.unit, second.unit) == ("kN", None)


def test_an_override_reaches_one_member_of_a_family(loaded: Loaded) -> None:
    text = plant().replace("id: press1.force", "family: press{n}.force\n    each: {n: [1, 2]}")
    first, second = loaded(text, ["press2.force.baseline.sigma=3"]).characteristics
    assert (first.detector.sigma, second.detector.sigma) == (2.0, 3.0)


def test_the_longest_id_followed_by_a_dot_wins(loaded: Loaded) -> None:
    text = plant() + ENTRY.replace("press1.force", "press1")
    longer, shorter = loaded(text, ["press1.force.unit=kN", "press1.unit=V"]).characteristics
    assert (longer.unit, shorter.unit) == ("kN", "V")


WRITE = "write ID.KEY=VALUE, such as press1.force.cusum.h=6"
BAD_OVERRIDES = [
    ("press1.force.cusum.h=-6", "must be greater than 0, is -6"),
    ("press1.force.cusm.h=6", "is no key here; did you mean 'cusum'?"),
    ("press1.force.cusum.hh=6", "is no key here; did you mean 'h'?"),
    ("press1.force.ewma.lambda=0.1", "ewma.L: is missing; write it as in ewma: {lambda: 0.1, L: 2.814}"),
    ("press1.force.rules=[x_y]", "rules[0]: there is no rule 'x_y'; known are beyond_limits, same_side, trend, "),
    ("press1.force.rules=[]", "rules: [] needs ewma or cusum beside it, else nothing could ever signal"),
    ("press1.force.topic=quietmill/x", "lies under quietmill/, where quietmill itself publishes; choose another"),
    ("press1.force.cusum.h=!!int 6", "tags (words that begin with '!') are refused; write the plain value"),
    ("press1.force.cusum.h=[", "is not YAML: "),
    ("press1.force.id=press2.force", "the id itself cannot be set"),
    ("press9.force.cusum.h=6", "no characteristic is called so; did you mean 'press1.force'?"),
    ("press1.force=6", WRITE),
    ("press1.force", WRITE),
    ("press1.force..h=6", WRITE),
    ("=", WRITE),
]


@pytest.mark.parametrize(("text", "words"), BAD_OVERRIDES)
def test_a_bad_override_is_named_and_not_the_file(refused: Refused, text: str, words: str) -> None:
    (problem,) = refused(plant(), [text])
    assert problem.startswith(f"--set {text}: {words}")


def test_what_the_file_has_wrong_is_not_laid_on_an_override(refused: Refused) -> None:
    problems = refused(plant("rules: []", "gap: 5"), ["press1.force.unit=kN"])
    assert [problem.partition(":")[0] for problem in problems] == ["plant.yaml"]


VALUES = st.recursive(
    st.sampled_from(["", "~", "5", "-1", ".nan", "1e999", "true", "kN", "/v", "'{n}'", "1h", "nelson", "high", "none"]),
    lambda inner: st.one_of(
        st.lists(inner, max_size=3).map(lambda items: f"[{', '.join(items)}]"),
        st.dictionaries(
            st.sampled_from(["centre", "sigma", "lower", "upper", "k", "h", "lambda", "L", "value", "time", "n"]),
            inner,
            max_size=3,
        ).map(lambda members: "{" + ", ".join(f"{key}: {value}" for key, value in members.items()) + "}"),
    ),
    max_leaves=6,
)  # fmt: skip
KEYS = st.sampled_from([key for key in keys_of(Characteristic) if key != "id"] + ["family", "each"])


@trying(deadline=None)
@given(entry=st.dictionaries(KEYS, VALUES, max_size=4), head=st.dictionaries(KEYS, VALUES, max_size=2))
def test_whatever_values_the_keys_have_nothing_but_a_settings_error_is_raised(
    loaded_once: Loaded, entry: dict[str, str], head: dict[str, str]
) -> None:
    defaults = ", ".join(f"{key}: {value}" for key, value in head.items())
    keys = {"topic": "tiles/press/1", "baseline": "{centre: 240, sigma: 2}"} | entry
    lines = "".join(f"    {key}: {value}\n" for key, value in keys.items())
    problems: list[Problem] = []
    try:
        settings = loaded_once(f"defaults: {{{defaults}}}\ncharacteristics:\n  - id: press1\n{lines}")
    except SettingsError as error:
        problems = error.problems
    else:
        assert settings.characteristics[0].detector.sigma > 0
    assert all("\n" not in str(problem) for problem in problems)
