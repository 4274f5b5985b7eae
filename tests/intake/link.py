"""The connection under test, and the loop that turns it."""

import contextlib
from collections.abc import Callable, Iterator, Sequence

from broker import wait_for
from quietmill.intake.broker import Connection, Will
from quietmill.intake.message import Message
from quietmill.settings import Broker

TOPICS = ("tiles/press/1", "tiles/press/2")
WILL = Will("quietmill/service/quietmill", b'{"state":"offline"}')


@contextlib.contextmanager
def connection(url: str, topics: Sequence[str] = TOPICS, **broker: object) -> Iterator[Connection]:
    link = Connection(Broker.model_validate({"url": url, **broker}), topics, WILL)
    try:
        yield link
    finally:
        link.close()


def drive(link: Connection, until: Callable[[], object], what: str = "the connection") -> list[Message]:
    """Turn the connection until something holds; return the messages that came."""
    taken: list[Message] = []

    def turn() -> object:
        taken.extend(link.take(0.02))
        return until()

    wait_for(turn, what=what)
    return taken


def ready(link: Connection) -> bool:
    return link.connected and not link.trouble


def take(link: Connection, count: int) -> list[Message]:
    """Turn the connection until so many messages have come."""
    taken: list[Message] = []
    wait_for(lambda: taken.extend(link.take(0.02)) or len(taken) >= count, what=f"{count} messages")
    return taken


def payloads(messages: Sequence[Message]) -> list[str]:
    return [message.payload.decode() for message in messages]


def reasons(logs: list[dict]) -> str:
    return " | ".join(str(entry["reason"]) for entry in logs if "reason" in entry)
