"""The keys of a characteristic: what they mean, what they default to, what is refused and how."""

import hashlib

import pytest

from quietmill.model import COUNTS, NELSON, Cusum, Ewma, Rule
from quietmill.settings import Characteristic, Payload
from settings.conftest import Loaded, Refused, plant


def one(loaded: Loaded, *keys: str) -> Characteristic:
    (characteristic,) = loaded(plant(*keys)).characteristics
    return characteristic


def test_without_keys_of_its_own_a_characteristic_is_made_for_streams(loaded: Loaded) -> None:
    detector = one(loaded).detector
    assert detector.rules == {Rule.BEYOND_LIMITS: 4}
    assert detector.cusum == Cusum(k=0.5, h=8, head_start=0, ceiling=2)
    assert (detector.ewma, detector.kind, detector.side, detector.spread_signals) == (
        None,
        "individuals",
        "both",
        False,
    )
    assert (detector.gap, detector.quiet_points, detector.points_kept, detector.timed) == (0, 8, 64, False)


def test_without_keys_of_its_own_a_characteristic_says_nothing_more(loaded: Loaded) -> None:
    plain = one(loaded)
    assert (plain.payload, plain.unit, plain.specification, plain.reaction, plain.labels) == (
        None,
        None,
        None,
        None,
        {},
    )
    assert (plain.favourable, plain.retained) == ("none", "skip")


@pytest.mark.parametrize("key", ["rules: [trend]", "ewma: {lambda: 0.2, L: 3}", "cusum: {k: 1, h: 5}"])
def test_a_detector_that_names_anything_is_that_alone(loaded: Loaded, key: str) -> None:
    detector = one(loaded, key).detector
    assert sum(map(bool, (detector.rules, detector.ewma, detector.cusum))) == 1


def test_ewma_and_cusum_are_taken_with_all_their_numbers(loaded: Loaded) -> None:
    keys = ["ewma: {lambda: 0.1, L: 2.814, limits: asymptotic}", "cusum: {k: 0.4, h: 5, head_start: 2.5, ceiling: 3}"]
    detector = one(loaded, *keys).detector
    assert detector.ewma == Ewma(lam=0.1, width=2.814, exact=False)
    assert detector.cusum == Cusum(k=0.4, h=5, head_start=2.5, ceiling=3)


def test_ewma_limits_are_exact_and_a_cusum_grows_without_end_unless_said(loaded: Loaded) -> None:
    detector = one(loaded, "rules: []", "ewma: {lambda: 0.1, L: 2.814}", "cusum: {k: 0.5, h: 5}").detector
    assert (detector.rules, detector.ewma, detector.cusum) == ({}, Ewma(0.1, 2.814), Cusum(0.5, 5, 0, float("inf")))


RULES = {
    "nelson": {rule: COUNTS[rule][0] if rule in COUNTS else 0 for rule in NELSON},
    "western_electric": {Rule.BEYOND_LIMITS: 3, Rule.TWO_OF_THREE: 0, Rule.FOUR_OF_FIVE: 0, Rule.SAME_SIDE: 8},
    "[beyond_limits, same_side]": {Rule.BEYOND_LIMITS: 3, Rule.SAME_SIDE: 9},
    "[{beyond_limits: 3.2}, {same_side: 8}]": {Rule.BEYOND_LIMITS: 3.2, Rule.SAME_SIDE: 8},
    "[{stratification: 2}, {mixture: 20}]": {Rule.STRATIFICATION: 2, Rule.MIXTURE: 20},
    "[trend, alternating]": {Rule.TREND: 0, Rule.ALTERNATING: 0},
}


@pytest.mark.parametrize(("text", "rules"), RULES.items())
def test_rules_are_a_set_or_a_list(loaded: Loaded, text: str, rules: dict[Rule, float]) -> None:
    assert one(loaded, f"rules: {text}").detector.rules == rules


def test_a_baseline_of_limits_is_their_middle_and_a_sixth(loaded: Loaded) -> None:
    text = plant().replace("{centre: 240.0, sigma: 2.0}", "{lower: 234, upper: 246}")
    baseline = loaded(text).characteristics[0].baseline
    assert (baseline.centre, baseline.sigma) == (240.0, 2.0)


def test_a_baseline_is_named_by_a_hash_of_what_it_resolves_to(loaded: Loaded) -> None:
    expected = hashlib.sha256(b'{"centre":240.0,"sigma":2.0}').hexdigest()[:8]
    assert one(loaded).baseline.version == expected
    text = plant().replace("{centre: 240.0, sigma: 2.0}", "{lower: 234, upper: 246}")
    assert loaded(text).characteristics[0].baseline.version == expected


def test_a_payload_says_where_its_reading_stands(loaded: Loaded) -> None:
    text = (
        "payload: {value: /v, time: /t, sequence: /n, array: /all, time_unit: ms, sequence_size: 65536, strings: parse,"
        " scale: 0.1, offset: -40}"
    )
    payload = one(loaded, text).payload
    assert payload == Payload(
        value="/v", time="/t", sequence="/n", array="/all", time_unit="ms", sequence_size=65536, strings="parse",
        scale=0.1, offset=-40,
    )  # fmt: skip
    assert payload is not None
    assert payload.parse_strings


def test_a_payload_tells_the_detector_of_times_and_counters(loaded: Loaded) -> None:
    detector = one(loaded, "payload: {value: /v, time: /t, sequence: /n, sequence_size: 256}").detector
    assert (detector.timed, detector.sequenced, detector.sequence_size) == (True, True, 256)


def test_a_plain_number_may_be_scaled(loaded: Loaded) -> None:
    payload = one(loaded, "payload: {scale: 0.001}").payload
    assert payload is not None
    assert (payload.value, payload.scale, payload.offset) == (None, 0.001, 0)


@pytest.mark.parametrize(
    ("text", "microseconds"),
    [("1s", 10**6), ("1.5m", 90 * 10**6), ("2 h", 7_200 * 10**6), ("7d", 604_800 * 10**6), ("0.000001s", 1)],
)
def test_durations_have_a_unit(loaded: Loaded, text: str, microseconds: int) -> None:
    assert one(loaded, f"gap: {text}").detector.gap == microseconds


def test_a_settings_object_never_changes(loaded: Loaded) -> None:
    with pytest.raises(ValueError, match="frozen"):
        one(loaded).topic = "tiles/press/2/force"


LONG = "x" * 129
DURATION = "must be a number and s, m, h or d, such as 60s, is"
POINTER = "must be a JSON Pointer (RFC 6901) such as /force or /data/0/v, is"
REFUSED = [  # key, place below characteristics[0], words
    ("unit: 5", "unit", "must be text, is 5; put it in quotes"),
    ("unit: [kN]", "unit", "must be text, is a list"),
    ('unit: "\\ud800"', "unit", "must not hold NUL or half a surrogate pair, is '\\ud800'"),
    ('reaction: "a\\0b"', "reaction", "must not hold NUL or half a surrogate pair, is 'a\\x00b'"),
    ("labels: {line: 1}", "labels.line", "must be text, is 1; put it in quotes"),
    ('labels: {"": x}', "labels['']", "a label's name must be 1 to 64 printable characters, is ''"),
    (f"labels: {{{', '.join(f'l{n}: x' for n in range(17))}}}", "labels", "may be 16 at most, are 17"),
    ("labels: []", "labels", "must hold keys and values, is a list"),
    ("kind: individual", "kind", "'individual' is unknown; did you mean 'individuals'?"),
    ("side: up", "side", "'up' is unknown; known are both, high, low"),
    ("side: true", "side", "must be both or high or low, is true"),
    ("favourable: hihg", "favourable", "'hihg' is unknown; did you mean 'high'?"),
    ("favorable: high", "favorable", "is no key here; did you mean 'favourable'?"),
    ("gap: 10", "gap", f"{DURATION} 10"),
    ("gap: 1w", "gap", f"{DURATION} '1w'"),
    ("gap: 0s", "gap", "must be longer than 0 and at most 36500d, is '0s'"),
    ("gap: 99999d", "gap", "must be longer than 0 and at most 36500d, is '99999d'"),
    ("quiet_points: 0", "quiet_points", "must be at least 1, is 0"),
    ("quiet_points: 8.5", "quiet_points", "must be a whole number, is 8.5"),
    ("quiet_points: true", "quiet_points", "must be a whole number, is true"),
    ("points_kept: 1001", "points_kept", "must be at most 1000, is 1001"),
    ("points_kept: 0", "points_kept", "must be at least 1, is 0"),
    ("retained: yes", "retained", "'yes' is unknown; known are skip, accept"),
    ("specification: {}", "specification", "needs lower, upper or both"),
    ("specification: {lower: 5, upper: 4}", "specification", "lower must be below upper, are 5 and 4"),
    ("specification: {lower: .nan}", "specification.lower", "must be a finite number, is nan"),
    ("specification: {low: 5}", "specification.low", "is no key here; did you mean 'lower'?"),
    ("ewma: {lambda: 0, L: 3}", "ewma.lambda", "must be greater than 0, is 0"),
    ("ewma: {lambda: 1.01, L: 3}", "ewma.lambda", "must be at most 1, is 1.01"),
    ("ewma: {lambda: 0.1, L: -1}", "ewma.L", "must be greater than 0, is -1"),
    ("ewma: {lambda: 0.1}", "ewma.L", "is missing; write it as in ewma: {lambda: 0.1, L: 2.814}"),
    ("ewma: 0.1", "ewma", "must hold keys and values, is 0.1"),
    ("cusum: {k: 0.5}", "cusum.h", "is missing; write it as in cusum: {k: 0.5, h: 5}"),
    ("cusum: {k: -1, h: 5}", "cusum.k", "must be at least 0, is -1"),
    ("cusum: {k: 0.5, h: 0}", "cusum.h", "must be greater than 0, is 0"),
    ("cusum: {k: 0.5, h: .inf}", "cusum.h", "must be a finite number, is inf"),
    ('cusum: {k: 0.5, h: "5"}', "cusum.h", "must be a number, is '5'"),
    ("cusum: {k: 0.5, h: 5, head_start: 5}", "cusum", "head_start must be below h, is 5 and h 5"),
    ("cusum: {k: 0.5, h: 5, ceiling: 0.9}", "cusum.ceiling", "must be at least 1, is 0.9"),
    ("rules: nelsn", "rules", "there is no set of rules 'nelsn'; did you mean 'nelson'?"),
    ("rules: 3", "rules", "must be nelson, western_electric or a list of rules, is 3"),
    ("rules: [beyond_limit]", "rules[0]", "there is no rule 'beyond_limit'; did you mean 'beyond_limits'?"),
    ("rules: [nelson]", "rules[0]", "nelson is a whole set; write rules: nelson"),
    ("rules: [cusum]", "rules[0]", "cusum is no entry of rules but a key of its own"),
    ("rules: [{trend: 6}]", "rules[0]", "trend takes no number"),
    ("rules: [{same_side: 31}]", "rules[0]", "same_side takes a whole number from 2 to 30, has 31"),
    ("rules: [{same_side: 8.5}]", "rules[0]", "same_side takes a whole number from 2 to 30, has 8.5"),
    ("rules: [{stratification: 51}]", "rules[0]", "stratification takes a whole number from 2 to 50, has 51"),
    ("rules: [{mixture: 21}]", "rules[0]", "mixture takes a whole number from 2 to 20, has 21"),
    ("rules: [{beyond_limits: 1.9}]", "rules[0]", "beyond_limits takes a number from 2 to 8, has 1.9"),
    ("rules: [{beyond_limits: .nan}]", "rules[0]", "beyond_limits takes a number from 2 to 8, has nan"),
    ("rules: [trend, {a: 1, b: 2}]", "rules[1]", "each must be a rule's name or {name: number}, is keys and values"),
    ("rules: [trend, trend]", "rules", "trend stands twice"),
    ("payload: {value: force}", "payload.value", f"{POINTER} 'force'; write '/force'"),
    ("payload: {value: /a~2b}", "payload.value", f"{POINTER} '/a~2b'"),
    ("payload: {value: 5}", "payload.value", f"{POINTER} 5"),
    ("payload: {time: /t}", "payload", "needs value, the JSON Pointer to the reading, such as value: /force"),
    ("payload: {scale: 0}", "payload", "scale must not be 0: every reading would be the same"),
    ("payload: {value: /v, time_unit: s}", "payload", "time_unit needs time, the JSON Pointer to the time"),
    ("payload: {value: /v, time: /t, time_unit: m}", "payload.time_unit", "'m' is unknown; did you mean 'ms'?"),
    (
        "payload: {value: /v, sequence_size: 9}",
        "payload",
        "sequence_size needs sequence, the JSON Pointer to the counter",
    ),
    ("payload: {value: /v, sequence: /n, sequence_size: 1}", "payload.sequence_size", "must be at least 2, is 1"),
]


@pytest.mark.parametrize(("key", "place", "words"), REFUSED)
def test_a_bad_value_is_refused_where_it_stands(refused: Refused, key: str, place: str, words: str) -> None:
    assert refused(plant(key)) == [f"plant.yaml:5: characteristics[0].{place}: {words}"]


NOT_YET = [
    ("kind: mean_range", "kind", "mean_range is not supported yet; supported is individuals"),
    ("kind: count_between", "kind", "count_between is not supported yet; supported is individuals"),
    ("subgroup: {size: 5}", "subgroup", "is not supported yet; leave it out"),
    ("payload: {value: /v, size: /n}", "payload.size", "is not supported yet; leave it out"),
    ("payload: {value: /v, subgroup: /s}", "payload.subgroup", "is not supported yet; leave it out"),
    ("limits: probability", "limits", "probability is not supported yet; supported is sigma"),
    ("transform: log", "transform", "log is not supported yet; supported is none"),
    ("points_per_day: 1440", "points_per_day", "is not supported yet; leave it out"),
]


@pytest.mark.parametrize(("key", "place", "words"), NOT_YET)
def test_what_comes_later_is_refused_and_not_ignored(refused: Refused, key: str, place: str, words: str) -> None:
    assert refused(plant(key)) == [f"plant.yaml:5: characteristics[0].{place}: {words}"]


BASELINES = [
    ("{centre: 240.0, sigma: -2.0}", ".sigma", "must be greater than 0, is -2.0"),
    ("{centre: 240.0, sigma: 0}", ".sigma", "must be greater than 0, is 0"),
    ("{centre: .nan, sigma: 2}", ".centre", "must be a finite number, is nan"),
    ("{centre: 240, sigma: .inf}", ".sigma", "must be a finite number, is inf"),
    ("{centre: 1e200, sigma: 1}", ".centre", "must be at most 1e+150, is 1e+200"),
    ('{centre: "240", sigma: 2}', ".centre", "must be a number, is '240'"),
    ("{centre: 240}", ".sigma", "is missing; write it as in baseline: {centre: 240.0, sigma: 2.0}"),
    ("{lower: 246, upper: 234}", "", "lower must be below upper, are 246 and 234"),
    ("{lower: 246, upper: 246}", "", "lower must be below upper, are 246 and 246"),
    ("{lower: .nan, upper: 246}", "", "lower and upper must be finite numbers, are nan and 246"),
    ("{lower: 1, upper: x}", "", "lower and upper must be numbers, are 1 and 'x'"),
    ("{lower: 1, sigma: 2}", "", "takes centre and sigma, or lower and upper; has 'lower', 'sigma'"),
    ("{centre: 1e9, sigma: 1e-9}", "", "sigma 1e-09 is too small to be told apart beside a centre of 1e+09"),
    ("240", "", "must be {centre, sigma} or {lower, upper}, is 240"),
    ("{file: press1.yaml}", "", "file is not supported yet; write {centre, sigma} or {lower, upper}"),
    ("{learn: 100}", "", "learn is not supported yet; write {centre, sigma} or {lower, upper}"),
    ("{centre: 1, sigma_z: 1.2}", "", "sigma_z is not supported yet; write {centre, sigma} or {lower, upper}"),
    ("{centre: 1, sigma: 1, ar1: 0.5}", "", "ar1 is not supported yet; write {centre, sigma} or {lower, upper}"),
]


@pytest.mark.parametrize(("text", "place", "words"), BASELINES)
def test_a_bad_baseline_is_refused(refused: Refused, text: str, place: str, words: str) -> None:
    problems = refused(plant().replace("{centre: 240.0, sigma: 2.0}", text))
    assert problems == [f"plant.yaml:4: characteristics[0].baseline{place}: {words}"]


ID = "must be 1 to 128 of A-Z a-z 0-9 . _ - and not begin with a dot, is"


@pytest.mark.parametrize(
    ("text", "shown"),
    [('""', "''"), (".a", "'.a'"), ("a b", "'a b'"), ("a/b", "'a/b'"), ("µ", "'µ'"), ("5", "5"), ('"a\\n"', "'a\\n'")],
)
def test_an_id_is_the_last_level_of_topics(refused: Refused, text: str, shown: str) -> None:
    assert refused(plant().replace("press1.force", text)) == [f"plant.yaml:2: characteristics[0].id: {ID} {shown}"]


def test_an_id_has_at_most_128_characters(loaded: Loaded, refused: Refused) -> None:
    assert loaded(plant().replace("press1.force", LONG[:128])).characteristics[0].id == LONG[:128]
    assert ID in refused(plant().replace("press1.force", LONG))[0]


TOPICS = [
    ("tiles/+/1", "must not hold + or #, is 'tiles/+/1'; a family names many topics"),
    ("tiles/#", "must not hold + or #, is 'tiles/#'; a family names many topics"),
    ('""', "must not be empty"),
    ("$SYS/uptime", "must not begin with $, which is the broker's own, is '$SYS/uptime'"),
    ('"a\\0b"', "must not hold NUL or half a surrogate pair, is 'a\\x00b'"),
    ('"a\\nb"', "must not hold control characters, is 'a\\nb'"),
    ("x" * 65_536, "is longer than MQTT allows (65,535 bytes)"),
    ("5", "must be text, is 5; put it in quotes"),
    ("quietmill/press", "lies under quietmill/, where quietmill itself publishes; choose another publish.prefix"),
]


@pytest.mark.parametrize(("topic", "words"), TOPICS, ids=[words for _, words in TOPICS])
def test_a_topic_is_exact_and_not_our_own(refused: Refused, topic: str, words: str) -> None:
    problems = refused(plant().replace("tiles/press/1/force", topic))
    assert problems == [f"plant.yaml:3: characteristics[0].topic: {words}"]


def test_several_characteristics_may_share_a_topic(loaded: Loaded) -> None:
    settings = loaded(plant() + plant().partition("\n")[2].replace("press1", "press2"))
    assert {characteristic.topic for characteristic in settings.characteristics} == {"tiles/press/1/force"}


def test_a_detector_that_could_never_signal_is_refused(refused: Refused) -> None:
    words = "rules: [] needs ewma or cusum beside it, else nothing could ever signal"
    assert refused(plant("rules: []")) == [f"plant.yaml:2: characteristics[0]: {words}"]
