"""The settings of a plant as a whole: broker, outlets and characteristics."""

from pathlib import Path
from typing import Annotated, Any, Literal, Self
from urllib.parse import urlsplit

from pydantic import BeforeValidator, Field, model_validator

from quietmill.settings.characteristic import Characteristic, Form
from quietmill.settings.values import Duration, Text, parse_duration

__all__ = ["Broker", "Publish", "Settings", "Web", "record_of"]

PORTS = {"mqtt": 1883, "mqtts": 8883, "ws": 80, "wss": 443}
DAY = 86_400_000_000
MAX_CLIENT_ID = 128


def version_of(value: Any) -> str:
    text = str(value)
    if text not in {"5", "3.1.1", "5.0"}:
        raise ValueError(f"must be 5 or 3.1.1, is {value!r}")
    return "3.1.1" if text == "3.1.1" else "5"


def level_of(value: Any) -> str:
    """Return text that may stand in a topic."""
    if not isinstance(value, str) or not value or set(value) & set("+#\0") or value.strip("/") != value:
        raise ValueError(f"must be text without +, # and outer slashes, for it stands in topics, is {value!r}")
    return value


def client_id_of(value: Any) -> str:
    name = level_of(value)
    if "/" in name or len(name) > MAX_CLIENT_ID:
        raise ValueError(f"must be one level of a topic and at most {MAX_CLIENT_ID} characters, is {value!r}")
    return name


class Broker(Form):
    """How to reach the broker, and who to be there."""

    url: Text = "mqtt://127.0.0.1:1883"
    client_id: Annotated[str, BeforeValidator(client_id_of)] = "quietmill"
    version: Annotated[Literal["5", "3.1.1"], BeforeValidator(version_of)] = "5"
    user: Text | None = None
    password_file: Path | None = None
    ca_file: Path | None = None
    certificate_file: Path | None = None
    key_file: Path | None = None
    keepalive: Duration = 60_000_000
    session_expiry: Duration = 7 * DAY

    @model_validator(mode="after")
    def consistent(self) -> Self:
        """Check the address, and what belongs together."""
        try:
            parts = urlsplit(self.url)
            host, port = parts.hostname, parts.port
        except ValueError as error:
            raise ValueError(f"url must look like mqtt://127.0.0.1:1883, is {self.url!r}: {error}") from None
        if parts.scheme not in PORTS or not host or port == 0:
            raise ValueError(f"url must be mqtt, mqtts, ws or wss://host:port, is {self.url!r}")
        if "@" in parts.netloc:
            raise ValueError("url must not hold a user or password; use user and password_file")
        if parts.scheme in {"mqtt", "mqtts"} and parts.path not in {"", "/"}:
            raise ValueError(f"url has a path, which only ws and wss take, is {self.url!r}")
        if self.password_file is not None and self.user is None:
            raise ValueError("password_file needs user")
        if (self.certificate_file is None) != (self.key_file is None):
            raise ValueError("certificate_file and key_file belong together")
        if parts.scheme in {"mqtt", "ws"} and (self.ca_file or self.certificate_file):
            raise ValueError(f"certificates need an encrypted url (mqtts or wss), is {self.url!r}")
        if not 1 <= self.keepalive_seconds <= 65_535:
            raise ValueError("keepalive must be from 1s to 65535s")
        if not 1 <= self.session_expiry_seconds < 2**32 - 1:
            raise ValueError("session_expiry must be from 1s to some 49710d")
        return self

    @property
    def scheme(self) -> str:
        """`mqtt`, `mqtts`, `ws` or `wss`."""
        return urlsplit(self.url).scheme

    @property
    def host(self) -> str:
        """Name or address."""
        return urlsplit(self.url).hostname or ""

    @property
    def port(self) -> int:
        """TCP port."""
        return urlsplit(self.url).port or PORTS[self.scheme]

    @property
    def path(self) -> str:
        """Path of a websocket."""
        return urlsplit(self.url).path or "/mqtt"

    @property
    def keepalive_seconds(self) -> int:
        """How long the connection may be silent."""
        return self.keepalive // 1_000_000

    @property
    def session_expiry_seconds(self) -> int:
        """How long the broker keeps the session while the service is away."""
        return self.session_expiry // 1_000_000


def address_of(value: Any) -> str:
    try:
        parts = urlsplit(f"//{value}") if isinstance(value, str) else None
        good = parts is not None and parts.hostname and parts.port is not None and not parts.path
    except ValueError:
        good = False
    if not good:
        raise ValueError(f"must be host:port, such as 127.0.0.1:8088, is {value!r}")
    return str(value)


class Web(Form):
    """Where metrics and health are served."""

    listen: Annotated[str, BeforeValidator(address_of)] = "127.0.0.1:8088"

    @property
    def host(self) -> str:
        """Name or address to bind."""
        return urlsplit(f"//{self.listen}").hostname or ""

    @property
    def port(self) -> int:
        """TCP port; 0 lets the system choose."""
        return urlsplit(f"//{self.listen}").port or 0


class Publish(Form):
    """Under which topics, and as which source, the service speaks."""

    prefix: Annotated[str, BeforeValidator(level_of)] = "quietmill"
    source: Annotated[Text, Field(min_length=1)] = "quietmill"


def record_of(value: Any) -> str:
    """Return the address of the record. Raises `ValueError`."""
    url = value.get("url") if isinstance(value, dict) else value
    if not isinstance(url, str) or not url.startswith("sqlite:") or url == "sqlite:":
        raise ValueError(f"must be sqlite:FILE, such as sqlite:quietmill.db, is {url!r}")
    if isinstance(value, dict):
        unknown = set(value) - {"url", "keep", "keep_bytes"}
        if unknown:
            raise ValueError(f"has unknown keys {', '.join(sorted(unknown))}; known are url, keep, keep_bytes")
        if "keep" in value:
            parse_duration(value["keep"])
    return url


class Settings(Form):
    """All that a settings file says, checked."""

    path: Path
    broker: Broker = Broker()
    record: str | None = None
    web: Web = Web()
    publish: Publish = Publish()
    characteristics: tuple[Characteristic, ...]
