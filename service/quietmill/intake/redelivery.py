"""Messages that the broker sends again, told from new ones."""

from collections.abc import Mapping, Sequence
from hashlib import blake2b

from quietmill.intake.message import Message

__all__ = ["Redelivery"]


def fingerprint(message: Message) -> int:
    """Return a hash of topic and payload that is the same in every process."""
    content = message.topic.encode(errors="surrogatepass") + b"\0" + message.payload
    return int.from_bytes(blake2b(content, digest_size=8).digest(), "big") >> 1


class Redelivery:
    """The fingerprint of the last message under each packet id of the session.

    A message with DUP set that matches is one whose acknowledgement was lost: it is acknowledged in its place and
    counts nowhere. Any other one takes the packet id over. A broker without a session has forgotten, and so do we.
    """

    def __init__(self, seen: Mapping[int, int] | None = None) -> None:
        self.seen: dict[int, int] = dict(seen or {})

    def sift(self, messages: Sequence[Message]) -> tuple[list[Message], dict[int, int]]:
        """Return the messages that are new, in order, and what they changed in `seen`."""
        fresh: list[Message] = []
        changed: dict[int, int] = {}
        for message in messages:
            if message.qos == 0:
                fresh.append(message)
                continue
            mark = fingerprint(message)
            if message.dup and self.seen.get(message.mid) == mark:
                continue
            self.seen[message.mid] = changed[message.mid] = mark
            fresh.append(message)
        return fresh, changed

    def forget(self) -> None:
        """Begin anew, with a broker that knew no session."""
        self.seen.clear()
