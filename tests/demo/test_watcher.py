import signal
import sys
from pathlib import Path

import pytest

from broker import Peer, running, wait_for
from quietmill.demo.broker import DemoError, free_port, start_broker
from quietmill.demo.service import adapted_settings
from quietmill.demo.watcher import Heard, Watcher


def hear_until_last(watcher: Watcher) -> list[Heard]:
    heard: list[Heard] = []
    while not heard or not watcher.is_last(heard[-1]):
        heard.append(wait_for(lambda: watcher.hear(0.1), what="the last word"))
    return heard


@pytest.mark.broker
def test_the_last_word_comes_after_all_that_was_said_before(tmp_path: Path) -> None:
    with running(tmp_path) as broker, Peer(broker.port) as peer:
        watcher = Watcher(adapted_settings(tmp_path, broker.port, 1))
        peer.publish(*[(f"quietmill/signals/x{number}", "{}") for number in range(50)])
        watcher.say_last()
        heard = hear_until_last(watcher)
        watcher.close()
    assert [each.topic for each in heard[:-1]] == [f"quietmill/signals/x{number}" for number in range(50)]


@pytest.mark.broker
def test_the_service_is_online_once_it_says_so_itself(tmp_path: Path) -> None:
    with running(tmp_path) as broker, Peer(broker.port) as peer:
        service = "quietmill/service/quietmill-tileworks"
        peer.publish((service, '{"state": "offline"}'), (service, '{"state": "online"}'), retain=True)
        watcher = Watcher(adapted_settings(tmp_path, broker.port, 1))
        assert watcher.is_online(wait_for(lambda: watcher.hear(0.1)))
        assert not watcher.is_online(Heard(service, {"state": "offline"}))
        assert not watcher.is_online(Heard("quietmill/signals/x", {"state": "online"}))
        watcher.close()


@pytest.mark.broker
def test_a_broker_that_goes_ends_the_demo(tmp_path: Path) -> None:
    with running(tmp_path) as broker:
        watcher = Watcher(adapted_settings(tmp_path, broker.port, 1))
        watcher.say_last()
        hear_until_last(watcher)
        watcher.look_after()
        broker.kill()
        wait_for(lambda: watcher._lost, what="the loss to be noticed")
        with pytest.raises(DemoError, match="the broker has gone"):
            watcher.look_after()
        watcher.close()


@pytest.mark.broker
def test_the_plant_waits_while_the_broker_is_behind(tmp_path: Path) -> None:
    with running(tmp_path) as broker:
        watcher = Watcher(adapted_settings(tmp_path, broker.port, 1))
        assert broker.process
        broker.process.send_signal(signal.SIGSTOP)
        watcher.publish([("tiles/press/1", b"{}")] * 2000)
        assert not watcher.full
        watcher.publish([("tiles/press/1", b"{}")])
        assert watcher.full
        broker.process.send_signal(signal.SIGCONT)
        wait_for(lambda: not watcher.full, what="the broker to catch up")
        watcher.close()


def test_a_broker_that_does_not_answer_is_named(tmp_path: Path) -> None:
    with pytest.raises(DemoError, match="the broker does not answer"):
        Watcher(adapted_settings(tmp_path, free_port(), 1))


def test_a_demo_without_any_broker_says_what_to_install(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setattr("shutil.which", lambda *_, **__: None)
    monkeypatch.setitem(sys.modules, "iotcore", None)
    with pytest.raises(DemoError, match=r"install mosquitto, or .*quietmill\[demo\]"), start_broker(tmp_path):
        pass


def test_a_broker_that_cannot_start_says_why(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    program = tmp_path / "mosquitto"
    program.write_text("#!/bin/sh\necho 'Error: the port is taken'\nexit 1\n")
    program.chmod(0o755)
    monkeypatch.setattr("shutil.which", lambda *_, **__: str(program))
    with pytest.raises(DemoError, match="the broker did not start: Error: the port is taken"), start_broker(tmp_path):
        pass
