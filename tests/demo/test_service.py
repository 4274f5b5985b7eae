import socket
from pathlib import Path

import pytest

from broker import wait_for
from quietmill.demo import service as module
from quietmill.demo.broker import DemoError, free_port
from quietmill.demo.service import Service, adapted_settings, settings_file, start_service

METRICS = """# HELP quietmill_readings_total x
quietmill_readings_total{outcome="accepted"} 1200.0
quietmill_readings_total{outcome="late"} 3.0
quietmill_outbox_events 2.0
"""


def changed(monkeypatch: pytest.MonkeyPatch, folder: Path, text: str) -> None:
    (folder / "changed").mkdir()
    place = folder / "changed" / "tileworks.yaml"
    place.write_text(text)
    monkeypatch.setattr(module, "PLACES", (place,))


def test_the_settings_of_the_plant_get_the_addresses_of_the_run(tmp_path: Path) -> None:
    settings = adapted_settings(tmp_path, 1234, 4321)
    assert settings.broker.url == "mqtt://127.0.0.1:1234"
    assert settings.web.listen == "127.0.0.1:4321"
    assert settings.path.parent == tmp_path
    assert len(settings.characteristics) == 38


def test_settings_that_are_not_there_are_named(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setattr(module, "PLACES", (tmp_path / "tileworks.yaml",))
    with pytest.raises(DemoError, match=r"config/tileworks\.yaml is missing: run the demo from a clone"):
        settings_file()


def test_settings_that_somebody_broke_are_named_with_their_errors(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    changed(monkeypatch, tmp_path, settings_file().read_text().replace("sigma: 2.0", "sigma: -2.0"))
    with pytest.raises(DemoError, match=r"was changed and has errors:\n.*:\d+: .*sigma: must be greater than 0"):
        adapted_settings(tmp_path, 1234, 4321)


def test_settings_for_another_broker_are_not_used(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    changed(monkeypatch, tmp_path, settings_file().read_text().replace("127.0.0.1:1883", "plant.example:1883"))
    with pytest.raises(DemoError, match=r"its broker and web must stand at 127\.0\.0\.1"):
        adapted_settings(tmp_path, 1234, 4321)


def test_a_service_that_ends_by_itself_is_reported_with_its_log(tmp_path: Path) -> None:
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        settings = adapted_settings(tmp_path, free_port(), taken.getsockname()[1])
        with start_service(settings, tmp_path / "log") as service:
            wait_for(lambda: service._process.poll() is not None, 60, "the end of the service")
            with pytest.raises(DemoError, match=r"the service ended with exit code 1.*\n.*is another service there"):
                service.look_after()


def test_a_service_that_does_not_answer_has_judged_nothing(tmp_path: Path) -> None:
    settings = adapted_settings(tmp_path, free_port(), free_port())
    with start_service(settings, tmp_path / "log") as service:
        unserved = Service(service._process, tmp_path / "log", adapted_settings(tmp_path, 1, free_port()))
        assert unserved.progress() == (0, 0)


def test_readings_of_every_outcome_count_as_judged() -> None:
    assert module.counted(METRICS) == (1203, 2)
