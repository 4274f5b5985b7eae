"""Messages that the broker sends again, told from new ones."""

from collections.abc import Mapping, Sequence

from quietmill.intake.message import Message, fingerprint

__all__ = ["Redelivery"]


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
