"""Broker, record, web and publish: their defaults, their bounds, the files they name."""

import re
import textwrap
from pathlib import Path

import pytest

from quietmill.settings import (
    Baseline,
    Broker,
    Characteristic,
    Payload,
    Publish,
    Settings,
    SettingsError,
    Specification,
    Web,
    load,
)
from quietmill.settings.characteristic import CusumForm, EwmaForm
from quietmill.settings.load import KEYS
from quietmill.settings.plant import Record
from quietmill.settings.wording import keys_of
from settings.conftest import Loaded, Refused, plant


def with_broker(*keys: str) -> str:
    return plant(head=f"broker: {{{', '.join(keys)}}}\n")


def test_a_plant_that_names_only_characteristics_has_all_the_rest(loaded: Loaded) -> None:
    settings = loaded(plant())
    broker = settings.broker
    assert (broker.scheme, broker.host, broker.port, broker.version) == ("mqtt", "127.0.0.1", 1883, "5")
    assert (broker.client_id, broker.user, broker.keepalive_seconds) == ("quietmill", None, 60)
    assert broker.session_expiry_seconds == 7 * 86_400
    assert (settings.web.host, settings.web.port) == ("127.0.0.1", 8088)
    assert (settings.publish.prefix, settings.publish.source, settings.record) == ("quietmill", "quietmill", None)


@pytest.mark.parametrize(
    ("url", "scheme", "host", "port"),
    [
        ("mqtt://broker.plant", "mqtt", "broker.plant", 1883),
        ("mqtts://broker.plant", "mqtts", "broker.plant", 8883),
        ("ws://broker.plant/mqtt", "ws", "broker.plant", 80),
        ("wss://broker.plant:9443/mqtt", "wss", "broker.plant", 9443),
        ("mqtt://[::1]:1884", "mqtt", "::1", 1884),
    ],
)
def test_the_scheme_gives_the_port_that_the_url_does_not(
    loaded: Loaded, url: str, scheme: str, host: str, port: int
) -> None:
    broker = loaded(with_broker(f'url: "{url}"')).broker
    assert (broker.scheme, broker.host, broker.port) == (scheme, host, port)


def test_a_websocket_has_a_path(loaded: Loaded) -> None:
    assert loaded(with_broker("url: ws://broker/line/1")).broker.path == "/line/1"
    assert loaded(with_broker("url: ws://broker")).broker.path == "/mqtt"


@pytest.mark.parametrize(("text", "version"), [("5", "5"), ('"5"', "5"), ("5.0", "5"), ("3.1.1", "3.1.1")])
def test_the_version_may_be_a_number_or_a_text(loaded: Loaded, text: str, version: str) -> None:
    assert loaded(with_broker(f"version: {text}")).broker.version == version


URL = "must look like mqtt://127.0.0.1:1883"
BROKERS = [
    ("url: http://broker", "url", "must begin with mqtt://, mqtts://, ws:// or wss://, is 'http://broker'"),
    ("url: broker", "url", "must begin with mqtt://, mqtts://, ws:// or wss://, is 'broker'"),
    ("url: 5", "url", f"{URL}, is 5"),
    ("url: 'mqtt://'", "url", f"{URL}, is 'mqtt://'"),
    ("url: 'mqtt://a b'", "url", f"{URL}, without spaces, is 'mqtt://a b'"),
    ("url: 'mqtt://a:0'", "url", f"{URL}, is 'mqtt://a:0'"),
    ("url: 'mqtt://a?b'", "url", f"{URL}, is 'mqtt://a?b'"),
    ("url: mqtt://a/b", "url", "has a path, which only ws and wss take, is 'mqtt://a/b'"),
    (
        "url: 'mqtt://u:secret@a'",
        "url",
        "must not hold a user or password; use broker.user and broker.password_file",
    ),
    ("version: 4", "version", "must be 5 or 3.1.1, is 4"),
    ("version: 3.1", "version", "must be 5 or 3.1.1, is 3.1"),
    ("client_id: a/b", "client_id", "must be one level of a topic and at most 128 characters, is 'a/b'"),
    ("client_id: ''", "client_id", "must not be empty"),
    ("clientid: a", "clientid", "is no key here; did you mean 'client_id'?"),
    ("keepalive: 60", "keepalive", "must be a number and s, m, h or d, such as 60s, is 60"),
    ("password_file: plant.yaml", "", "password_file needs user"),
    ("certificate_file: plant.yaml", "", "certificate_file and key_file belong together"),
    ("key_file: plant.yaml", "", "certificate_file and key_file belong together"),
    ("ca_file: plant.yaml", "", "certificates need an encrypted url (mqtts or wss), is 'mqtt://127.0.0.1:1883'"),
    ("keepalive: 1d", "", "keepalive must be from 1s to 65535s"),
    ("keepalive: 0.5s", "", "keepalive must be from 1s to 65535s"),
    ("session_expiry: 0.5s", "", "session_expiry must be from 1s to some 49710d"),
    ("user: 5", "user", "must be text, is 5; put it in quotes"),
]


@pytest.mark.parametrize(("key", "place", "words"), BROKERS)
def test_a_bad_broker_is_refused(refused: Refused, key: str, place: str, words: str) -> None:
    assert refused(with_broker(key)) == [f"plant.yaml:1: broker{'.' * bool(place)}{place}: {words}"]


def test_files_are_looked_for_beside_the_settings(tmp_path: Path, loaded: Loaded) -> None:
    (tmp_path / "secrets").mkdir()
    (tmp_path / "secrets" / "password").write_text("pass")
    broker = loaded(with_broker("user: line1", "password_file: secrets/password")).broker
    assert broker.password_file == tmp_path / "secrets" / "password"


def test_an_absolute_path_stays_what_it_is(tmp_path: Path, loaded: Loaded) -> None:
    (tmp_path / "ca.pem").touch()
    broker = loaded(with_broker("url: mqtts://broker", f"ca_file: {tmp_path}/ca.pem")).broker
    assert broker.ca_file == tmp_path / "ca.pem"


def test_a_file_that_is_not_there_is_named(tmp_path: Path, refused: Refused) -> None:
    (problem,) = refused(with_broker("user: line1", "password_file: none"))
    assert problem == (f"plant.yaml:1: broker.password_file: {tmp_path}/none cannot be read: no such file or directory")


LISTEN = "must be host:port, such as 127.0.0.1:8088, is"
SOURCE = "must be a URI or part of one, such as plant/line1, is"
SIZE = "must be a number and kB, MB, GB or TB, such as 10GB, is"
OTHERS = [
    ("web: {listen: 8088}", "web.listen", f"{LISTEN} 8088"),
    ("web: {listen: ':8088'}", "web.listen", f"{LISTEN} ':8088'"),
    ("web: {listen: 'a:99999'}", "web.listen", f"{LISTEN} 'a:99999'"),
    ("web: {port: 8088}", "web.port", "is no key here; known are listen"),
    ("web:", "web", "must hold keys and values, indented below it, is nothing"),
    ("publish: {prefix: a/+}", "publish.prefix", "must not hold + or #, is 'a/+'"),
    ("publish: {prefix: a/}", "publish.prefix", "must not begin or end with a slash, is 'a/'"),
    ("publish: {source: ''}", "publish.source", f"{SOURCE} ''"),
    ("publish: {source: my plant}", "publish.source", f"{SOURCE} 'my plant'"),
    ("record: quietmill.db", "record.url", "must be sqlite:FILE, such as sqlite:quietmill.db, is 'quietmill.db'"),
    ("record: {keep: 90d}", "record.url", "is missing; write it as in record: {url: sqlite:quietmill.db}"),
    ("record: {url: 'sqlite:a', keep: 90}", "record.keep", "must be a number and s, m, h or d, such as 60s, is 90"),
    ("record: {url: 'sqlite:a', keep_bytes: 10}", "record.keep_bytes", f"{SIZE} 10"),
    ("record: {url: 'sqlite:a', kept: 90d}", "record.kept", "is no key here; did you mean 'keep'?"),
    ("brokers: {}", "brokers", "is no key of the settings; did you mean 'broker'?"),
]  # fmt: skip


@pytest.mark.parametrize(("key", "place", "words"), OTHERS)
def test_a_bad_part_is_refused(refused: Refused, key: str, place: str, words: str) -> None:
    assert refused(plant(head=f"{key}\n")) == [f"plant.yaml:1: {place}: {words}"]


def test_a_record_is_accepted_in_both_forms(loaded: Loaded) -> None:
    assert loaded(plant(head="record: sqlite:quietmill.db\n")).record == "sqlite:quietmill.db"
    head = "record: {url: sqlite:quietmill.db, keep: 90d, keep_bytes: 10GB}\n"
    assert loaded(plant(head=head)).record == "sqlite:quietmill.db"


def test_the_web_may_listen_on_any_free_port(loaded: Loaded) -> None:
    web = loaded(plant(head='web: {listen: "[::1]:0"}\n')).web
    assert (web.host, web.port) == ("::1", 0)


def test_another_prefix_frees_the_usual_one(loaded: Loaded) -> None:
    text = plant(head="publish: {prefix: alerts/mill}\n").replace("tiles/press", "quietmill/press")
    assert loaded(text).publish.prefix == "alerts/mill"


@pytest.mark.parametrize("text", ["", "characteristics: []\n", "characteristics: {a: 1}\n", "characteristics:\n"])
def test_a_plant_without_characteristics_is_refused(refused: Refused, text: str) -> None:
    (problem,) = refused("web: {listen: 127.0.0.1:8088}\n" + text)
    assert ": characteristics: must be a list of at least one characteristic, is " in problem


CONFIG = Path(__file__).parents[2] / "config"
README = (CONFIG / "README.md").read_text()
BLOCKS = [textwrap.dedent(block) for block in re.findall(r"(?:^    .*\n)+", README, re.MULTILINE)]
ENTRIES = [block for block in BLOCKS if re.search(r"^ *- (id|family): ", block, re.MULTILINE)]


@pytest.mark.parametrize("path", sorted(CONFIG.glob("*.yaml")), ids=lambda path: path.name)
def test_the_settings_that_we_ship_are_good(path: Path) -> None:
    settings = load(path)
    assert isinstance(settings, Settings)
    assert settings.path == path


def test_every_key_stands_in_the_readme() -> None:
    forms = (Broker, Record, Web, Publish, Characteristic, Payload, Baseline, EwmaForm, CusumForm, Specification)
    keys = {key for form in forms for key in keys_of(form)} | set(KEYS)
    assert {key for key in keys if f"`{key}`" not in README} == set()


@pytest.mark.parametrize("block", ENTRIES, ids=range(len(ENTRIES)))
def test_the_readmes_characteristics_are_good(loaded: Loaded, block: str) -> None:
    settings = loaded(block if block.startswith("characteristics:") else f"characteristics:\n{block}")
    assert len(settings.characteristics) in {1, 8}


def test_the_readmes_default_detector_is_the_default(loaded: Loaded) -> None:
    (block,) = (block for block in BLOCKS if "ceiling: 2" in block and block.startswith("rules"))
    explicit = loaded(plant(*block.splitlines())).characteristics[0]
    assert explicit.detector == loaded(plant()).characteristics[0].detector


def test_a_settings_error_says_everything_as_text(tmp_path: Path) -> None:
    path = tmp_path / "plant.yaml"
    path.write_text(plant("unit: 5", "gap: 5"))
    with pytest.raises(SettingsError) as caught:
        load(path)
    assert str(caught.value).splitlines() == [str(problem) for problem in caught.value.problems]
