"""The settings of a plant as a whole: broker, outlets and characteristics."""

import re
from pathlib import Path
from typing import Annotated, Any, Literal, Self
from urllib.parse import SplitResult, urlsplit

from pydantic import BeforeValidator, model_validator

from quietmill.settings.characteristic import Characteristic, Form
from quietmill.settings.problems import shown
from quietmill.settings.values import Duration, Size, Text, in_topics

__all__ = ["Broker", "Publish", "Record", "Settings", "Web"]

PORTS = {"mqtt": 1883, "mqtts": 8883, "ws": 80, "wss": 443}
DAY = 86_400_000_000
MAX_CLIENT_ID = 128
MAX_PREFIX_BYTES = 1024
LISTEN = re.compile(r"[^\s@/?#]+:[0-9]{1,5}")
SOURCE = re.compile(r"[A-Za-z0-9._~:/?#\[\]@!$&'()*+,;=%-]{1,512}")


def version_of(value: Any) -> str:
    text = str(value) if isinstance(value, (str, int, float)) else ""
    if text not in {"5", "3.1.1", "5.0"}:
        raise ValueError(f"must be 5 or 3.1.1, is {shown(value)}")
    return "3.1.1" if text == "3.1.1" else "5"


def level_of(value: Any) -> str:
    """Return text that may stand in a topic between slashes."""
    name = in_topics(value)
    if name.strip("/") != name:
        raise ValueError(f"must not begin or end with a slash, is {shown(name)}")
    if len(name.encode()) > MAX_PREFIX_BYTES:
        raise ValueError(f"must be at most {MAX_PREFIX_BYTES:,} bytes long")
    return name


def client_id_of(value: Any) -> str:
    name = level_of(value)
    if "/" in name or len(name) > MAX_CLIENT_ID:
        raise ValueError(f"must be one level of a topic and at most {MAX_CLIENT_ID} characters, is {shown(value)}")
    return name


def file_of(value: Any) -> Any:
    if not isinstance(value, (str, Path)) or not str(value) or "\0" in str(value):
        raise ValueError(f"must be the path of a file, is {shown(value)}")
    return Path(value)


def split_url(url: str, example: str) -> SplitResult:
    """Return the parts of an address. Raises `ValueError` for one that has parts which nobody would heed."""
    if any(character.isspace() or not character.isprintable() for character in url):
        raise ValueError(f"must look like {example}, without spaces, is {shown(url)}")
    try:
        parts = urlsplit(url)
        good = bool(parts.hostname) and parts.port != 0
    except ValueError as error:
        raise ValueError(f"must look like {example}, is {shown(url)}: {error}") from None
    if not good or parts.query or parts.fragment or url.endswith(("?", "#")):
        raise ValueError(f"must look like {example}, is {shown(url)}")
    return parts


def url_of(value: Any) -> Any:
    example = "mqtt://127.0.0.1:1883"
    if not isinstance(value, str):
        raise ValueError(f"must look like {example}, is {shown(value)}")
    if value.partition("://")[0] not in PORTS:
        raise ValueError(f"must begin with mqtt://, mqtts://, ws:// or wss://, is {shown(value)}")
    parts = split_url(value, example)
    if "@" in parts.netloc:
        # the address is not shown: it may hold a password
        raise ValueError("must not hold a user or password; use broker.user and broker.password_file")
    if parts.scheme in {"mqtt", "mqtts"} and parts.path not in {"", "/"}:
        raise ValueError(f"has a path, which only ws and wss take, is {shown(value)}")
    return value


File = Annotated[Path, BeforeValidator(file_of)]


class Broker(Form):
    """How to reach the broker, and who to be there."""

    url: Annotated[Text, BeforeValidator(url_of)] = "mqtt://127.0.0.1:1883"
    client_id: Annotated[str, BeforeValidator(client_id_of)] = "quietmill"
    version: Annotated[Literal["5", "3.1.1"], BeforeValidator(version_of)] = "5"
    user: Text | None = None
    password_file: File | None = None
    ca_file: File | None = None
    certificate_file: File | None = None
    key_file: File | None = None
    keepalive: Duration = 60_000_000
    session_expiry: Duration = 7 * DAY

    @model_validator(mode="after")
    def consistent(self) -> Self:
        """Check what belongs together."""
        if self.password_file is not None and self.user is None:
            raise ValueError("password_file needs user")
        if (self.certificate_file is None) != (self.key_file is None):
            raise ValueError("certificate_file and key_file belong together")
        if self.scheme in {"mqtt", "ws"} and (self.ca_file or self.certificate_file):
            raise ValueError(f"certificates need an encrypted url (mqtts or wss), is {shown(self.url)}")
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
        parts = urlsplit(f"//{value}") if isinstance(value, str) and LISTEN.fullmatch(value) else None
        good = parts is not None and bool(parts.hostname) and parts.port is not None
    except ValueError:
        good = False
    if not good:
        raise ValueError(f"must be host:port, such as 127.0.0.1:8088, is {shown(value)}")
    return value


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


def source_of(value: Any) -> str:
    """Return a CloudEvents source, which is a URI reference."""
    if not isinstance(value, str) or not SOURCE.fullmatch(value):
        raise ValueError(f"must be a URI or part of one, such as plant/line1, is {shown(value)}")
    return value


class Publish(Form):
    """Under which topics, and as which source, the service speaks."""

    prefix: Annotated[str, BeforeValidator(level_of)] = "quietmill"
    source: Annotated[str, BeforeValidator(source_of)] = "quietmill"


def record_url_of(value: Any) -> Any:
    if not isinstance(value, str) or not value.startswith("sqlite:") or value == "sqlite:" or "\0" in value:
        raise ValueError(f"must be sqlite:FILE, such as sqlite:quietmill.db, is {shown(value)}")
    return value


class Record(Form):
    """Where the record stands, and how much history it will keep; none is kept yet."""

    url: Annotated[str, BeforeValidator(record_url_of)]
    keep: Duration | None = None
    keep_bytes: Size | None = None


class Settings(Form):
    """All that a settings file says, checked."""

    path: Path
    broker: Broker = Broker()
    record: str | None = None
    web: Web = Web()
    publish: Publish = Publish()
    characteristics: tuple[Characteristic, ...]
