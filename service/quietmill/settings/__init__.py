"""The settings file as checked objects."""

from quietmill.settings.characteristic import Baseline, Characteristic, Payload, Specification
from quietmill.settings.load import load
from quietmill.settings.plant import Broker, Publish, Settings, Web
from quietmill.settings.problems import Problem, SettingsError

__all__ = [
    "Baseline",
    "Broker",
    "Characteristic",
    "Payload",
    "Problem",
    "Publish",
    "Settings",
    "SettingsError",
    "Specification",
    "Web",
    "load",
]
